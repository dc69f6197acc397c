package estimate

import (
	"flag"
	"fmt"
	"os"
	"strings"
	"testing"
	"time"

	"tailbell/exact"
	"tailbell/exact/resample"
)

var update = flag.Bool("update", false, "rewrite the tables in README.md")

var seeds = []uint64{1, 2, 3}

// TestTables works out the tables of README.md again, and what they claim.
func TestTables(t *testing.T) {
	var b strings.Builder
	delayTable(t, &b)
	trailingTable(t, &b)
	const begin, end = "<!-- tables: go test ./monitor/estimate -run TestTables -update -->\n", "<!-- end of the tables -->"
	text, err := os.ReadFile("README.md")
	if err != nil {
		t.Fatal(err)
	}
	before, rest, ok := strings.Cut(string(text), begin)
	_, after, ok2 := strings.Cut(rest, end)
	if !ok || !ok2 {
		t.Fatal("README.md has no place for the tables")
	}
	want := before + begin + "\n" + b.String() + end + after
	if *update {
		if err := os.WriteFile("README.md", []byte(want), 0o644); err != nil {
			t.Fatal(err)
		}
		return
	}
	if want != string(text) {
		t.Errorf("the tables of README.md are no longer these; -update rewrites them:\n%s", b.String())
	}
}

const (
	delayDays   = 60   // of history, up to the look
	delayWindow = 28   // days
	delayMean   = 10.0 // days, exponential
	delayRate   = 0.5  // events a day
	delayLimit  = 0.01
	delayLooks  = 4000 // for each seed
)

// thinned is the mean of what is known of the window when F is so.
func thinned(f func(age time.Duration) float64) float64 {
	mean := 0.0
	for a := range delayWindow {
		mean += delayRate * f(time.Duration(a)*24*time.Hour)
	}
	return mean
}

// delayTable looks at the end of a history of which the last reports are still
// to come.
func delayTable(t *testing.T, b *strings.Builder) {
	t.Helper()
	fmt.Fprintf(b, `**Reports that are still to come.** %g events a day become known after %g days on average (exponential). At the end of
%d days the last %d are looked at, at once; p limit %g in each tail, %d looks a seed. F is estimated from the same %d days.

| what is expected of the window | seed | rings, upper | rings, lower | rings at twice the rate, upper |
|---|---|---|---|---|
`, delayRate, delayMean, delayDays, delayWindow, delayLimit, delayLooks, delayDays)
	truth := func(age time.Duration) float64 {
		return exact.Wait{Events: 1, Rate: 1 / delayMean}.Within(age.Hours() / 24)
	}
	methods := []string{"everything (no thinning)", "thinned by the naive F", "thinned by the product limit", "thinned by the true F"}
	for m, name := range methods {
		for _, seed := range seeds {
			var upper, lower, found int
			for look := range uint64(delayLooks) {
				for _, ratio := range []float64{1, 2} {
					reports := delayedHistory(resample.Source(seed, 2*look+uint64(ratio)), delayDays, delayRate*ratio, delayMean)
					mean := delayRate * delayWindow
					if m == 3 {
						mean = thinned(truth)
					} else if d, err := DelayOf(reports, delayDays*oneDay); err == nil {
						switch m {
						case 1:
							mean = thinned(d.Naive)
						case 2:
							mean = thinned(d.F)
						}
					}
					up, low := ring(reports, mean)
					switch {
					case ratio == 2 && up:
						found++
					case ratio == 1 && up:
						upper++
					case ratio == 1 && low:
						lower++
					}
				}
			}
			share := func(n int) float64 { return 100 * float64(n) / delayLooks }
			fmt.Fprintf(b, "| %s | %d | %.2f %% | %.2f %% | %.1f %% |\n", name, seed, share(upper), share(lower), share(found))
		}
	}
	size := exact.Poisson{Rate: thinned(truth), Exposure: 1}
	_, up, _ := size.CriticalUpper(delayLimit)
	_, low, _ := size.CriticalLower(delayLimit)
	fmt.Fprintf(b, "\nWith the true F the exact sizes are %.2f %% and %.2f %%.\n\n", 100*up, 100*low)
}

// ring looks at the window at the end of the history.
func ring(reports []Reported, mean float64) (upper, lower bool) {
	n := int64(0)
	for _, r := range reports {
		if r.Occurred > (delayDays-delayWindow)*oneDay {
			n += r.Events
		}
	}
	law := exact.Poisson{Rate: mean, Exposure: 1}
	return law.Upper(n) <= delayLimit, law.Lower(n) <= delayLimit
}

const (
	trailingMonths = 40 * 12
	trailingSpan   = 36 // months that the baseline is taken from
	trailingWindow = 3
	trailingRate   = 2.0
	trailingLimit  = 0.02
	trailingRuns   = 150 // for each seed
)

// trailingTable looks at histories in which nothing ever happens.
func trailingTable(t *testing.T, b *strings.Builder) {
	t.Helper()
	fmt.Fprintf(b, `**What rang by chance and is left out.** %g events a month, always; windows of %d months against the %d months before them
(conditional test, p limit %g); %d histories of %d years a seed. "Left out": the months of every window that rang are not
used again, as if each ring had been real.

| months that rang | seed | baseline over truth, mean | false alerts in 100 years |
|---|---|---|---|
`, trailingRate, trailingWindow, trailingSpan, trailingLimit, trailingRuns, trailingMonths/12)
	for _, leaveOut := range []bool{false, true} {
		for _, seed := range seeds {
			ratio, alerts, looks := 0.0, 0, 0
			for run := range uint64(trailingRuns) {
				r, a, n := trailing(resample.Source(seed, run), leaveOut)
				ratio += r
				alerts += a
				looks += n
			}
			name := map[bool]string{false: "kept", true: "left out"}[leaveOut]
			fmt.Fprintf(b, "| %s | %d | %.3f | %.1f |\n", name, seed, ratio/float64(looks), 1200*float64(alerts)/float64(looks))
		}
	}
	fmt.Fprintln(b)
}

// trailing runs one history and returns the sum over looks of the baseline over
// the truth, the crossings and the looks.
func trailing(rng source, leaveOut bool) (ratio float64, alerts, looks int) {
	counts := make([]int64, trailingMonths)
	out := make([]bool, trailingMonths)
	ringing := false
	for end := range trailingMonths + 1 {
		if end < trailingMonths {
			counts[end] = resample.Poisson(rng, trailingRate)
		}
		from := end - trailingWindow
		if from < trailingSpan {
			continue
		}
		n, events, months := int64(0), int64(0), 0
		for i := from; i < end; i++ {
			n += counts[i]
		}
		for i := from - trailingSpan; i < from; i++ {
			if !out[i] {
				events += counts[i]
				months++
			}
		}
		law := exact.TwoRate{RefEvents: events, Exposure: trailingWindow, RefExposure: float64(months)}
		rings := law.Upper(n) <= trailingLimit
		if rings && !ringing {
			alerts++
		}
		ringing = rings
		for i := from; rings && leaveOut && i < end; i++ {
			out[i] = true
		}
		ratio += float64(events) / float64(months) / trailingRate
		looks++
	}
	return ratio, alerts, looks
}
