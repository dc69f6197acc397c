package estimate

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"reflect"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"

	"tailbell/config"
	"tailbell/exact/resample"
	"tailbell/monitor"
)

// nightingale is a set-up for monthly deaths: strengths are person-months, and
// rates per 1,000 a year are those per 12,000 of them. The factor is 12 a month,
// not 365.25 over the month's days.
const nightingale = `
name = "army"
[[indicator]]
name = "death"
series = ["army/*"]
unit = "person-months"
per = 12_000
every = "1mo"
windows = ["1mo", "3mo"]
[indicator.baseline]
kind = "known"
rate = 100
`

// army reads the monthly deaths of each cause.
func army(t *testing.T) *History {
	t.Helper()
	setup, err := config.Parse([]byte(nightingale), "test")
	if err != nil {
		t.Fatal(err)
	}
	var sums []monitor.SlotSum
	for _, row := range rows(t, "nightingale.csv") {
		for i, cause := range []string{"disease", "wounds", "other"} {
			s := sum(t, row[0]+"-01", number(t, row[i+2]), row[1])
			s.Series = "army/" + cause
			sums = append(sums, s)
		}
	}
	h, err := Gather(&setup.Indicators[0], sums, Span{Clock: monitor.Never})
	if err != nil {
		t.Fatal(err)
	}
	return h
}

// TestNightingale compares yearly rates per 1,000 with those that she printed
// for January 1855 (Table II; from memory, recomputed).
func TestNightingale(t *testing.T) {
	h := army(t)
	for _, c := range []struct {
		cause string
		want  float64
	}{{"army/disease", 1022.8}, {"army/wounds", 30.7}, {"army/other", 120.0}} {
		part, err := h.Select(func(s string) bool { return s == c.cause })
		if err != nil {
			t.Fatal(err)
		}
		s := part.Series[0]
		if len(s.Slots) != 24 {
			t.Fatalf("%d months, want 24", len(s.Slots))
		}
		january := Series{Slots: s.Slots[9:10]}
		got := float64(january.events()) / january.exposure() * h.Indicator.Per
		near(t, c.cause, got, c.want, 0.05)
		wrong := got * 365.25 / 31 / 12
		if math.Abs(wrong-c.want) < 0.5 {
			t.Errorf("%s: 365.25 over the days gives the same", c.cause)
		}
	}
}

// TestNightingaleReport: nobody would take these two years for usual, and the
// report says so.
func TestNightingaleReport(t *testing.T) {
	r, err := Analyse(t.Context(), army(t), Options{Seed: 1, Draws: 500})
	if err != nil {
		t.Fatal(err)
	}
	if r.Pooled.Events != 17982 { // 14,476 of disease, 1,758 of wounds and 1,748 others
		t.Errorf("%d deaths", r.Pooled.Events)
	}
	advice := strings.Join(r.Advice, "\n")
	for _, want := range []string{"Spread grows", "The series differ", "2.0 years can't tell a season from a single excess", "army/disease 1855-01-01"} {
		if !strings.Contains(advice, want) {
			t.Errorf("the advice lacks %q:\n%s", want, advice)
		}
	}
}

const months = 30

// invented has two series: one steady, one with an excess of 20 in a month.
func invented(seed uint64) *History {
	rng := resample.Source(seed, 0)
	a, b := make([]int64, months), make([]int64, months)
	for i := range a {
		a[i], b[i] = resample.Poisson(rng, 2), resample.Poisson(rng, 2)
	}
	b[20] += 20
	in := plain()
	in.Windows = append(in.Windows, config.Window{Name: "6mo", Slots: 6, Step: 1})
	return historyOf(in, seriesOf("x/a", a, one), seriesOf("x/b", b, one))
}

// TestReportIsPure: neither workers nor repetition change a byte.
func TestReportIsPure(t *testing.T) {
	var first []byte
	for _, workers := range []int{1, 3, 1} {
		r, err := Analyse(t.Context(), invented(1), Options{Seed: 5, Draws: 300, Workers: workers})
		if err != nil {
			t.Fatal(err)
		}
		text, err := json.Marshal(r)
		if err != nil {
			t.Fatal(err)
		}
		if first == nil {
			first = text
		}
		if d := cmp.Diff(string(first), string(text)); d != "" {
			t.Errorf("%d workers:\n%s", workers, d)
		}
	}
}

func TestExcessIsFound(t *testing.T) {
	r, err := Analyse(t.Context(), invented(2), Options{Seed: 1, Draws: 500})
	if err != nil {
		t.Fatal(err)
	}
	if len(r.Excesses) == 0 || r.Excesses[0].Series != "x/b" || r.Excesses[0].Start.Time().Format("2006-01") != "2001-09" {
		t.Errorf("excesses are %v", r.Excesses)
	}
	if !strings.Contains(strings.Join(r.Advice, "\n"), "x/b 2001-09-01 with") {
		t.Errorf("the advice does not name the excess: %q", r.Advice)
	}
	if r.Series[1].Spread.Chance.P > 0.01 || r.Series[0].Spread.Chance.P < 0.001 {
		t.Errorf("p of the series' spreads: %g and %g", r.Series[0].Spread.Chance.P, r.Series[1].Spread.Chance.P)
	}
	near(t, "influence", r.Excesses[0].Influence, 1-float64(r.Series[1].Events-r.Excesses[0].Events)/(months-1)*months/float64(r.Series[1].Events), 1e-12)
}

// TestSeasonIsFound: counts that double in winter over eight years are told from
// spread, with strata for the set-up that a parser takes.
func TestSeasonIsFound(t *testing.T) {
	rng := resample.Source(3, 0)
	events := make([]int64, 96)
	for i := range events {
		mean := 4.0
		if m := i % 12; m < 3 {
			mean = 12
		}
		events[i] = resample.Poisson(rng, mean)
	}
	h := historyOf(plain(), seriesOf("x/a", events, func(int) float64 { return 10 }))
	r, err := Analyse(t.Context(), h, Options{Seed: 1, Draws: 1000})
	if err != nil {
		t.Fatal(err)
	}
	advice := strings.Join(r.Advice, "\n")
	if !strings.Contains(advice, "use spread, or stratify by month, which leaves") {
		t.Errorf("advice: %s", advice)
	}
	stanza := r.Stanza.Text("[indicator.baseline]", func(string) string { return "" })
	setup, err := config.Parse([]byte(strings.Replace(nightingale, "[indicator.baseline]\nkind = \"known\"\nrate = 100\n", stanza, 1)), "test")
	if err != nil {
		t.Fatalf("%v\n%s", err, stanza)
	}
	b := setup.Indicators[0].Baselines[0]
	if b.Kind != config.Reference || b.Events != r.Pooled.Events || b.Exposure.String() != "960" || b.Strata == nil || b.Spread < 1.5 {
		t.Errorf("the stanza says %+v", b)
	}
	if f := b.Strata.Factors; f[0] < 1.5 || f[5] > 1 {
		t.Errorf("factors are %v", f)
	}
}

// TestTenHistoriesByChance: of plain histories few are accused of anything.
func TestTenHistoriesByChance(t *testing.T) {
	accused, marked := 0, 0
	for i := range uint64(10) {
		rng := resample.Source(100, i)
		events := make([]int64, 60)
		for j := range events {
			events[j] = resample.Poisson(rng, 2)
		}
		r, err := Analyse(t.Context(), historyOf(plain(), seriesOf("x/a", events, one)), Options{Seed: i, Draws: 400})
		if err != nil {
			t.Fatal(err)
		}
		marked += len(r.Stability.marked())
		if len(r.Stanza.Optional) > 0 || r.Within[0].Chance.P < 0.01 {
			accused++
		}
	}
	// A period of each history stands out with probability 0.05 at most.
	if marked > 2 {
		t.Errorf("%d periods of 10 histories without anything in them stand out", marked)
	}
	if accused > 2 {
		t.Errorf("%d of 10 histories without anything in them are accused", accused)
	}
}

func TestNoEvents(t *testing.T) {
	h := historyOf(plain(), seriesOf("x/a", []int64{0, 0, 0}, func(int) float64 { return 100 }))
	r, err := Analyse(t.Context(), h, Options{Seed: 1, Draws: 200})
	if err != nil {
		t.Fatal(err)
	}
	near(t, "upper bound", r.Pooled.Upper, 3.6888794541139363/300, 1e-12) // -ln(0.025)
	if len(r.Advice) != 1 || !strings.Contains(r.Advice[0], "no events at all") {
		t.Errorf("advice: %q", r.Advice)
	}
	if _, err := json.Marshal(r); err != nil {
		t.Error(err)
	}
}

// TestProportion: the same path with trials.
func TestProportion(t *testing.T) {
	in := plain()
	in.Measure = config.Proportion
	h := historyOf(in, seriesOf("x/a", []int64{2, 0, 1, 3, 1, 0, 2, 1, 9, 1, 0, 2}, func(int) float64 { return 40 }))
	r, err := Analyse(t.Context(), h, Options{Seed: 1, Draws: 1000})
	if err != nil {
		t.Fatal(err)
	}
	near(t, "proportion", r.Pooled.Rate, 22./480, 1e-12)
	// R 4.2.2: binom.test(22, 480)$conf.int.
	near(t, "lower", r.Pooled.Lower, 0.0289430622, 1e-9)
	near(t, "upper", r.Pooled.Upper, 0.0685723122, 1e-9)
	if !r.Within[0].Chance.Exact {
		t.Error("p is not exact")
	}
	if p := r.Within[0].Chance.P; p > 0.01 {
		t.Errorf("p is %g", p)
	}
}

// TestWindowsOfTrials: the last so many trials have no length in slots. What is
// said is that of the spans of time alone, if there are any.
func TestWindowsOfTrials(t *testing.T) {
	analyse := func(windows ...config.Window) *Report {
		in := plain()
		in.Measure, in.Windows = config.Proportion, windows
		h := historyOf(in, seriesOf("x/a", []int64{2, 0, 1, 3, 1, 0, 2, 1, 9, 1, 0, 2}, func(int) float64 { return 40 }))
		r, err := Analyse(t.Context(), h, Options{Seed: 1, Draws: 1000})
		if err != nil {
			t.Fatal(err)
		}
		return r
	}
	trials, span := config.Window{Name: "200 trials", Trials: 200, Step: 1}, config.Window{Name: "2d", Slots: 2, Step: 1}
	alone := analyse(trials)
	near(t, "proportion", alone.Pooled.Rate, 22./480, 1e-12)
	if len(alone.Windows) != 0 {
		t.Errorf("windows of %s", alone.Windows[0].Window)
	}
	both, without := analyse(trials, span), analyse(span)
	if !reflect.DeepEqual(both, without) {
		t.Errorf("with windows of trials besides %+v, without %+v", both, without)
	}
}

func TestAnalyseStops(t *testing.T) {
	ctx, cancel := context.WithCancel(t.Context())
	cancel()
	if _, err := Analyse(ctx, invented(1), Options{Seed: 1}); !errors.Is(err, context.Canceled) {
		t.Errorf("got %v", err)
	}
}

// TestDelayInStanza: events known late make a delay that begins with what is known at the
// first look and ends at 1.
func TestDelayInStanza(t *testing.T) {
	h := invented(4)
	h.Indicator.Settle = 0
	var reports []Reported
	for i := range monitor.Instant(200) {
		reports = append(reports, Reported{i * oneDay, (i + i%20) * oneDay, 1})
	}
	r, err := Analyse(t.Context(), h, Options{Seed: 1, Draws: 200, Reports: reports, Now: 400 * oneDay})
	if err != nil {
		t.Fatal(err)
	}
	if r.Delay == nil || len(r.Delay.Shares) > delayAges {
		t.Fatalf("delay is %+v", r.Delay)
	}
	line := ""
	for _, o := range r.Stanza.Optional {
		if o.Key() == "delay" {
			line = o.Line
		}
	}
	if !strings.HasPrefix(line, `delay = { ages = ["0s", `) || !strings.HasSuffix(line, fmt.Sprintf("%g] }", 1.0)) {
		t.Errorf("the stanza says %q", line)
	}
}
