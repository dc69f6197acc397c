package estimate

import (
	"encoding/json"
	"errors"
	"strings"
	"testing"

	"tailbell/config"
	"tailbell/exact/resample"
	"tailbell/monitor"
)

// toldOf analyses a history and fails unless the report can be written.
func toldOf(t *testing.T, h *History) *Report {
	t.Helper()
	r, err := Analyse(t.Context(), h, Options{Seed: 1, Draws: 200})
	if err != nil {
		t.Fatal(err)
	}
	if _, err := json.Marshal(r); err != nil {
		t.Error(err)
	}
	return r
}

// TestWindowsOfOddCounts: the law with spread is a law, so that its shares sum
// to the number of windows, wherever it is told of at all: in slots without
// exposure, where the spread is hardly over 1, and in more trials than
// beta-binomial tails are summed over.
func TestWindowsOfOddCounts(t *testing.T) {
	bursts := make([]int64, 24)
	allBut, many := make([]int64, 60), make([]int64, 24)
	for i := range bursts {
		if i%7 == 1 {
			bursts[i] = 9
		}
		many[i] = int64(i%9) * 100
	}
	for i := range allBut {
		allBut[i] = 10
	}
	allBut[0] = 9
	for name, c := range map[string]struct {
		proportion bool
		counts     []int64
		exposure   func(i int) float64
		spread     bool
	}{
		"a slot without exposure": {false, bursts, func(i int) float64 { return float64(min(1, i)) }, true},
		"a spread hardly over 1":  {true, allBut, func(int) float64 { return 10 }, true},
		"very many trials":        {true, many, func(int) float64 { return 1e9 }, false},
	} {
		in := plain()
		if c.proportion {
			in.Measure = config.Proportion
		}
		w := toldOf(t, historyOf(in, seriesOf("x/a", c.counts, c.exposure))).Windows[0]
		if w.Phi > 1 != c.spread {
			t.Errorf("%s: the windows have a spread of %v", name, w.Phi)
		}
		chance, spread := 0.0, 0.0
		for _, s := range w.Shares {
			chance += s.Chance
			spread += s.Spread
		}
		near(t, name+": windows by chance", chance, float64(w.Count), 1e-9)
		if c.spread {
			near(t, name+": windows with spread", spread, float64(w.Count), 1e-9)
		}
	}
}

// TestNoExposure: without exposure there is no rate, and nothing bounds it.
func TestNoExposure(t *testing.T) {
	none := func(int) float64 { return 0 }
	h := historyOf(plain(), seriesOf("x/a", []int64{0, 0, 0}, none))
	if _, err := Analyse(t.Context(), h, Options{Seed: 1, Draws: 200}); !errors.Is(err, ErrNoExposure) {
		t.Errorf("no exposure at all: %v", err)
	}
	r := toldOf(t, historyOf(plain(), seriesOf("x/a", []int64{0, 0}, none), seriesOf("x/b", []int64{2, 1}, one)))
	if !r.Series[0].Unbounded || r.Series[1].Unbounded || r.Pooled.Unbounded {
		t.Errorf("unbounded are %v, %v and all %v", r.Series[0].Unbounded, r.Series[1].Unbounded, r.Pooled.Unbounded)
	}
}

// TestNothingUsable: it is said that slots were left out, and why.
func TestNothingUsable(t *testing.T) {
	in := plain()
	in.Measure, in.Events = config.Proportion, config.Counted
	_, err := Gather(in, []monitor.SlotSum{sum(t, "2026-03-01", 12, "10"), sum(t, "2026-04-01", 11, "10")}, Span{Clock: monitor.Never})
	if !errors.Is(err, ErrNothing) || !strings.Contains(err.Error(), "2 slots have more events than trials") {
		t.Errorf("got %v", err)
	}
}

// TestNoBootstrap says why there is none.
func TestNoBootstrap(t *testing.T) {
	counts := []int64{1, 2, 0, 1, 3, 0, 1, 2, 1, 0, 2, 1}
	for _, c := range []struct {
		periods, block int
		exposure       func(int) float64
		want           string
	}{
		{12, 0, one, ""},
		{6, 0, one, "6 periods are fewer than 8"},
		{12, 7, one, "12 periods allow blocks of 6 at most"},
		{12, 0, func(i int) float64 { return float64(min(1, i)) }, "without exposure"},
	} {
		own := append([]int64{0}, counts...)[:c.periods]
		h := historyOf(plain(), seriesOf("x/a", own, c.exposure))
		r, err := Analyse(t.Context(), h, Options{Seed: 1, Draws: 200, Block: c.block})
		if err != nil {
			t.Fatal(err)
		}
		s := r.Stability
		if (s.Bootstrap == nil) != (s.NoBootstrap != "") || !strings.Contains(s.NoBootstrap, c.want) {
			t.Errorf("%d periods, block %d: %+v, %q", c.periods, c.block, s.Bootstrap, s.NoBootstrap)
		}
	}
}

// TestOneCountTellsNoSpread: nothing is explained by chance where there is
// nothing to explain.
func TestOneCountTellsNoSpread(t *testing.T) {
	r := toldOf(t, historyOf(plain(), seriesOf("x/a", []int64{3}, one)))
	text := strings.Join(r.Advice, "\n")
	if strings.Contains(text, "chance explains it") || !strings.Contains(text, "nothing can be said of spread") {
		t.Errorf("advice: %s", text)
	}
}

// TestFactorsAreTaken: a set-up takes factors from 1e-6 on, so none may be
// rounded to nothing.
func TestFactorsAreTaken(t *testing.T) {
	counts := make([]int64, 60)
	for i := range counts {
		if counts[i] = 3; i%12 == 5 {
			counts[i] = 400_000
		}
	}
	r := toldOf(t, historyOf(plain(), seriesOf("x/a", counts, one)))
	if len(r.Stanza.Optional) == 0 {
		t.Fatal("no strata")
	}
	for _, o := range r.Stanza.Optional {
		if o.Key() == "strata" && strings.Contains(o.Line, "0.000,") {
			t.Error(o.Line)
		}
	}
}

// TestNoDelay: all events were known by the end of their slot.
func TestNoDelay(t *testing.T) {
	var reports []Reported
	for day := range monitor.Instant(30) {
		reports = append(reports, Reported{(day + 1) * oneDay, day*oneDay + oneDay/2, 1})
	}
	h := historyOf(plain(), seriesOf("x/a", []int64{3, 1, 2}, one))
	r, err := Analyse(t.Context(), h, Options{Seed: 1, Draws: 200, Reports: reports, Now: 40 * oneDay})
	if err != nil {
		t.Fatal(err)
	}
	if d := r.Delay; d == nil || len(d.Shares) != 1 || d.Shares[0] != (DelayStep{"0s", 1, 1}) {
		t.Errorf("got %+v", d)
	}
}

// TestOneEventInManyCells: an enumeration is no shorter because little can
// fall into its many cells.
func TestOneEventInManyCells(t *testing.T) {
	counts := make([]int64, 300_000)
	counts[777] = 1
	h := historyOf(plain(), seriesOf("x/a", counts, func(i int) float64 { return float64(1 + i%3) }))
	p, err := spreadTable(false, h.Series, 1).test(t.Context(), resample.Plan{Draws: 200, Seed: 1})
	if err != nil || p.Exact {
		t.Errorf("got %+v, %v", p, err)
	}
}
