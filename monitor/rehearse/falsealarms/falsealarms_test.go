package falsealarms

import (
	"flag"
	"fmt"
	"math"
	"os"
	"strings"
	"testing"

	"tailbell/exact"
)

var table = flag.Bool("table", false, "run the whole study, print its table and write it into README.md")

func bench(t *testing.T) *Bench {
	t.Helper()
	x, err := NewBench()
	if err != nil {
		t.Fatal(err)
	}
	return x
}

// above reports whether one mean lies above another by more than three times
// their joint standard error.
func above(a, b Outcome) bool {
	meanA, errA := a.Mean()
	meanB, errB := b.Mean()
	return meanA-meanB > 3*math.Hypot(errA, errB)
}

func told(o Outcome) string {
	mean, err := o.Mean()
	return fmt.Sprintf("%.4f (%.4f)", mean, err)
}

// crossings is how often a year a window of a Poisson count with that mean
// comes to signal at the count k: it holds c events in the days that it shares
// with the one before, which did not signal.
func crossings(mean float64, k int64) float64 {
	shared := exact.Poisson{Rate: mean / window, Exposure: window - 1}
	one := exact.Poisson{Rate: mean / window, Exposure: 1}
	sum := 0.0
	for c := range k {
		sum += shared.PMF(c) * one.Lower(k-1-c) * one.Upper(k-c)
	}
	return 365 * sum
}

// TestCrossings holds the formula against 0.000750158 a look for a mean of 2
// and a critical count of 7, which was confirmed by a simulation of its own.
func TestCrossings(t *testing.T) {
	if got := crossings(2, 7) / 365; math.Abs(got-0.000750158) > 5e-10 {
		t.Errorf("%.9f crossings a look", got)
	}
}

func TestLearnedBaselines(t *testing.T) {
	s := Study{Draws: 300, Years: 3, Seeds: []uint64{1}}
	known, learned := bench(t).Learned(s, 2, 5, 36)
	few, more := &learned[0], &learned[1]
	t.Logf("seed 1; known %s; 5 events: plug-in %s, conditional %s; 36: plug-in %s, conditional %s",
		told(known), told(few.PlugIn), told(few.Conditional), told(more.PlugIn), told(more.Conditional))
	k, _, _ := exact.Poisson{Rate: 2, Exposure: 1}.CriticalUpper(0.001)
	mean, err := known.Mean()
	if most := crossings(2, k); mean > most+3*err || mean < most/2-3*err {
		t.Errorf("the test that knows the rate rings %s times a year; it crosses %.4f times", told(known), most)
	}
	if !above(few.PlugIn, known) || !above(few.PlugIn, few.Conditional) {
		t.Error("the plug-in test of 5 events does not ring more often than the others beyond the joint error")
	}
	if !above(few.PlugIn, more.PlugIn) {
		t.Error("the plug-in test does not gain from 36 events")
	}
	// A look rings by chance at most once in 1,000, whatever the reference held.
	for _, l := range learned {
		if mean, _ := l.Conditional.Mean(); mean > 0.001*365 {
			t.Errorf("with %g events the conditional test rings %s times a year", l.Usual, told(l.Conditional))
		}
	}
	if at, _, _ := few.PlugIn.Quantile(0.99); at < 1 {
		t.Errorf("of a hundred wards with 5 events one has only %.2f false alerts a year by the plug-in test", at)
	}
}

func TestSpreadHistories(t *testing.T) {
	s := Study{Draws: 60, Years: 5, Seeds: []uint64{1}}
	x := bench(t)
	before, calm := x.Spread(s, 8, 1)
	if mean, _ := before.Mean(); mean != must(calm.Mean()) {
		t.Errorf("without spread the two tests differ: %s, %s", told(before), told(calm))
	}
	for _, spread := range []float64{1.5, 3} {
		poisson, right := x.Spread(s, 8, spread)
		t.Logf("seed 1, spread %g: Poisson %s, right %s; none %s", spread, told(poisson), told(right), told(calm))
		if !above(poisson, before) || !above(poisson, right) {
			t.Errorf("spread %g: the Poisson test does not ring more often", spread)
		}
		if mean, _ := right.Mean(); mean > 0.001*365 || above(right, calm) {
			t.Errorf("spread %g: the right test rings %s times a year", spread, told(right))
		}
		before = poisson
	}
}

func must(mean, _ float64) float64 { return mean }

// TestCounts holds the drawn counts against the masses of the law.
func TestCounts(t *testing.T) {
	const draws = 200_000
	for _, spread := range []float64{1, 1.5, 3} {
		r := source(1, "counts", int(10*spread))
		var seen [12]float64
		for range draws {
			seen[min(Count(r, 2, spread), 11)]++
		}
		law := exact.NewNegativeBinomial(2, 1, spread)
		for k, n := range seen {
			p := law.PMF(int64(k))
			if k == 11 {
				p = law.Upper(11)
			}
			if err := math.Sqrt(p * (1 - p) / draws); math.Abs(n/draws-p) > 4*err {
				t.Errorf("spread %g: %d came with %.5f, its chance is %.5f (%.5f)", spread, k, n/draws, p, err)
			}
		}
	}
}

// TestSameSeedSameAlerts holds the study to its seeds, however it is spread
// over processors.
func TestSameSeedSameAlerts(t *testing.T) {
	s := Study{Draws: 20, Years: 2, Seeds: []uint64{3, 4}}
	x := bench(t)
	a, _ := x.Spread(s, 8, 3)
	b, _ := x.Spread(s, 8, 3)
	if fmt.Sprint(a) != fmt.Sprint(b) {
		t.Errorf("%v, then %v", a, b)
	}
}

const readme = "README.md"

// TestTable runs the whole study and writes its table.
func TestTable(t *testing.T) {
	if !*table {
		t.Skip("the whole study takes minutes: go test ./monitor/rehearse/falsealarms -run TestTable -table -v -timeout 1h")
	}
	x := bench(t)
	s := Study{Draws: 400, Years: 10, Seeds: []uint64{1, 2, 3}}
	var b strings.Builder
	line := func(cells ...string) { b.WriteString("| " + strings.Join(cells, " | ") + " |\n") }
	row := func(what, test string, o Outcome) {
		cells := []string{what, test}
		for _, m := range o.Means() {
			cells = append(cells, fmt.Sprintf("%.3f", m))
		}
		mean, err := o.Mean()
		cells = append(cells, fmt.Sprintf("%.3f ± %.3f", mean, err))
		for _, q := range []float64{0.9, 0.99} {
			at, lower, upper := o.Quantile(q)
			cells = append(cells, fmt.Sprintf("%.1f (%.1f to %.1f)", at, lower, upper))
		}
		line(cells...)
	}
	head := func(what string) {
		line(what, "test", "seed 1", "seed 2", "seed 3", "mean", "90 % quantile", "99 % quantile")
		b.WriteString("|---|---|---|---|---|---|---|---|\n")
	}
	head("reference")
	known, learned := x.Learned(s, 2, 5, 10, 36, 100)
	row("none", "the true rate", known)
	for _, l := range learned {
		events := fmt.Sprintf("%g events", l.Usual)
		row(events, "plug-in", l.PlugIn)
		row(events, "conditional", l.Conditional)
	}
	b.WriteByte('\n')
	head("spread")
	for _, spread := range []float64{1, 1.5, 2, 3} {
		poisson, right := x.Spread(s, 8, spread)
		row(fmt.Sprint(spread), "Poisson", poisson)
		row(fmt.Sprint(spread), "negative binomial", right)
	}
	t.Logf("\n%s", b.String())
	write(t, b.String())
}

// write puts the table between the marks in the README.
func write(t *testing.T, text string) {
	t.Helper()
	const begin, end = "<!-- the table -->\n", "<!-- end of the table -->\n"
	all, err := os.ReadFile(readme)
	if err != nil {
		t.Fatal(err)
	}
	before, rest, ok := strings.Cut(string(all), begin)
	_, after, closed := strings.Cut(rest, end)
	if !ok || !closed {
		t.Fatalf("%s has no marks for the table", readme)
	}
	if err := os.WriteFile(readme, []byte(before+begin+"\n"+text+"\n"+end+after), 0o644); err != nil {
		t.Fatal(err)
	}
}
