package estimate

import (
	"testing"

	"tailbell/config"
	"tailbell/exact/resample"
)

// TestFlyingBombs compares the shares by chance with Clarke 1946 (Feller, vol. 1,
// VI.7): squares expected to hold so many bombs.
func TestFlyingBombs(t *testing.T) {
	counts := frequencies(t, "clarke_1946")
	h := historyOf(plain(), seriesOf("squares", counts, one))
	if s := h.Series[0]; s.events() != 537 || len(s.Slots) != 576 {
		t.Fatalf("%d bombs in %d squares, want 537 in 576", s.events(), len(s.Slots))
	}
	w := h.windows(h.Indicator.Windows[0], 1)
	want := []float64{226.74, 211.39, 98.54, 30.62, 7.14}
	seen := []float64{229, 211, 93, 35, 7}
	chi, rest, restSeen := 0.0, 576.0, 576.0
	for k := range want {
		near(t, "expected", w.Shares[k].Chance, want[k], 0.005)
		if w.Shares[k].Seen != seen[k] {
			t.Errorf("%g squares hold %d, want %g", w.Shares[k].Seen, k, seen[k])
		}
		d := seen[k] - w.Shares[k].Chance
		chi += d * d / w.Shares[k].Chance
		rest -= w.Shares[k].Chance
		restSeen -= seen[k]
	}
	near(t, "expected to hold 5 or more", rest, 1.57, 0.005)
	near(t, "chi-square", chi+(restSeen-rest)*(restSeen-rest)/rest, 1.17, 0.005)
}

// TestAccidents fits the negative binomial by moments to the accidents of 647
// women (Greenwood and Yule 1920); the expected numbers are recomputed, since
// the published ones agree only to 1.5.
func TestAccidents(t *testing.T) {
	h := historyOf(plain(), seriesOf("women", frequencies(t, "greenwood_yule_1920"), one))
	spread, err := spreadTable(false, h.Series, 1).spread(t.Context(), resample.Plan{Draws: 500, Seed: 1}, false)
	if err != nil {
		t.Fatal(err)
	}
	mean := float64(h.Series[0].events()) / 647
	near(t, "mean", mean, 0.465, 5e-4)
	near(t, "variance", spread.Phi*mean, 0.692, 5e-4)
	// Their size is 0.95934 with the variance's divisor n, not n-1.
	phi := spread.Phi * 646 / 647
	near(t, "size by moments", mean/(phi-1), 0.95934, 5e-6)
	if spread.Chance.P > 0.003 {
		t.Errorf("p is %g", spread.Chance.P)
	}
	w := h.windows(h.Indicator.Windows[0], phi)
	for k, want := range []float64{442, 138.72, 44.38, 14} {
		near(t, "negative binomial", w.Shares[k].Spread, want, []float64{1.5, 0.005, 0.005, 1.5}[k])
	}
	for k, want := range []float64{406.3, 189.0, 44.0, 6.8} {
		near(t, "Poisson", w.Shares[k].Chance, want, 0.05)
	}
}

// TestWindowsRoll: only windows whose slots are all known count, and every one
// stands in one bin.
func TestWindowsRoll(t *testing.T) {
	s := seriesOf("x", []int64{1, 0, 2, 1, 0, 0, 3, 40, 1}, one)
	s.Slots = append(s.Slots[:4:4], s.Slots[5:]...) // slot 4 is not known
	in := plain()
	in.Windows[0].Slots = 2
	h := historyOf(in, s)
	w := h.windows(in.Windows[0], 1)
	if w.Count != 6 {
		t.Errorf("%d windows, want 6", w.Count)
	}
	seen, chance := 0.0, 0.0
	for _, b := range w.Shares {
		seen += b.Seen
		chance += b.Chance
	}
	near(t, "windows seen", seen, 6, 0)
	near(t, "windows by chance", chance, 6, 1e-9)
}

// TestWindowsThinned: of a great many windows every so-many-th is counted, and
// it is said of how many.
func TestWindowsThinned(t *testing.T) {
	h := historyOf(plain(), seriesOf("x", make([]int64, 9000), one))
	if w := h.windows(h.Indicator.Windows[0], 1); w.Count != 3000 || w.Of != 9000 {
		t.Errorf("%d windows of %d, want 3000 of 9000", w.Count, w.Of)
	}
}

// TestWindowsAtLimit: windows are held against a stated limit on p. Of 100
// windows of mean 1, R's ppois(4, 1, lower.tail = FALSE) = 0.003659847 and
// ppois(3, 1, lower.tail = FALSE) = 0.01898816 put the critical count at 5
// events for p <= 0.01. Limits that follow from an allowance differ by series:
// nothing is said then.
func TestWindowsAtLimit(t *testing.T) {
	counts := make([]int64, 100)
	for i := range counts {
		counts[i] = 1
	}
	counts[0], counts[1], counts[2], counts[3], counts[4], counts[5] = 5, 0, 0, 0, 0, 1
	in := plain()
	in.PLimit = 0.01
	h := historyOf(in, seriesOf("x", counts, one))
	w := h.windows(in.Windows[0], 1)
	if w.AtLimit == nil || w.AtLimit.Past != 1 {
		t.Fatalf("got %+v", w.AtLimit)
	}
	near(t, "past the limit by chance", w.AtLimit.Chance, 0.3659847, 5e-7)
	in.PLimit, in.Allowance = 0, &config.Allowance{}
	if w := h.windows(in.Windows[0], 1); w.AtLimit != nil {
		t.Errorf("under an allowance: %+v", w.AtLimit)
	}
}

// TestCrossing holds the crossing rate against a reference point that was
// confirmed by simulation: 28 slots, mean 2, critical count 7: 0.000750158.
func TestCrossing(t *testing.T) {
	h := historyOf(plain(), seriesOf("x", []int64{1}, one))
	c := crossing{h: h, slots: 28, step: 1, slot: 1, critical: 7, upper: true}
	near(t, "crossing rate", c.rate(2./28), 0.000750158, 5e-10)
	// Up- and downcrossings of the same level are equally frequent.
	down := crossing{h: h, slots: 28, step: 1, slot: 1, critical: 6}
	near(t, "crossing rate downwards", down.rate(2./28), c.rate(2./28), 1e-12)
	moved := crossing{h: h, slots: 4, step: 4, slot: 7, critical: 7, upper: true}
	p := h.lawAt(2, 1).Upper(7)
	near(t, "without shared slots", moved.rate(2./28), p*(1-p), 1e-12)
}
