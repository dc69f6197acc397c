package allowance

import (
	"errors"
	"math"
	"math/bits"
	"math/rand/v2"
	"testing"
	"time"

	"tailbell/exact"
)

// trialPlan is that of one window of the last n trials.
func trialPlan(law Law, n int64, batch [2]int64) *Plan {
	law.Proportion = true
	return &Plan{
		Law: law, Exposure: 1, Volume: 100, Batch: batch, Windows: []Window{{Trials: n, Arrival: true}},
		Upper: true, SlotsPerYear: 10, PerYear: 5,
	}
}

// trialsPart is the only part of a plan.
func trialsPart(t *testing.T, p *Plan) *part {
	t.Helper()
	if err := p.Check(); err != nil {
		t.Fatal(err)
	}
	return p.parts()[0]
}

// TestTrialsEnumerated sums over all outcomes of two windows that follow one
// another, trial by trial: batches of one, and of several.
func TestTrialsEnumerated(t *testing.T) {
	for _, n := range []int64{2, 5, 9} {
		for _, b := range []int64{1, 2, 3} {
			for _, theta := range []float64{0.02, 0.2, 0.6} {
				x := trialsPart(t, trialPlan(Law{Rate: theta}, n, [2]int64{b, b}))
				held := int(x.now.size)
				for k := 1; k <= held; k++ {
					want, first := 0.0, 0.0
					for outcome := range 1 << (held + int(b)) {
						events := bits.OnesCount(uint(outcome))
						p := math.Pow(theta, float64(events)) * math.Pow(1-theta, float64(held+int(b)-events))
						before := bits.OnesCount(uint(outcome) >> b)
						now := bits.OnesCount(uint(outcome) & (1<<held - 1))
						if before < k && now >= k {
							want += p
						}
						if now >= k {
							first += p
						}
					}
					got := x.evenBatches(x.model, critical{int64(k), true})
					if want /= float64(b); math.Abs(got.look-want) > 1e-12*want || math.Abs(got.first-first) > 1e-12*first {
						t.Errorf("n %d, batches of %d, theta %v, k %d: %v, want %v; first %v, want %v", n, b, theta, k, got.look, want, got.first, first)
					}
				}
			}
		}
	}
}

// batches follows a series exactly through batches of given sizes. An alert opens
// where an event came and the window signals while none is open, and is gone as
// soon as the window does not.
type batches struct {
	n     int64
	theta float64
	k     func(trials int64) critical
}

// openings is the expected number of alerts.
func (l batches) openings(sizes []int64) float64 {
	type state struct {
		counts string // of the window's batches, the oldest first
		open   bool
	}
	chances := map[state]float64{{}: 1}
	opened := 0.0
	for at, size := range sizes {
		held, from := int64(0), at+1
		for from > 0 && held < l.n {
			from--
			held += sizes[from]
		}
		full, now := held >= l.n, l.k(held)
		law := exact.NewBinomial(size, l.theta)
		next := map[state]float64{}
		for s, p := range chances {
			for e := range size + 1 {
				q := p * law.PMF(e)
				counts := s.counts + string(rune(e))
				counts = counts[len(counts)-(at+1-from):]
				sum := int64(0)
				for _, c := range []byte(counts) {
					sum += int64(c)
				}
				signals := full && now.ok && sum >= now.k
				if signals && e > 0 && !s.open {
					opened += q
				}
				next[state{counts, signals && (s.open || e > 0)}] += q
			}
		}
		chances = next
	}
	return opened
}

// TestTrialsNeverMore holds the promise for batches of any sizes, at random and
// contrived: no more alerts open than were predicted at most.
func TestTrialsNeverMore(t *testing.T) {
	seed := uint64(time.Now().UnixNano())
	r := rand.New(rand.NewPCG(seed, 0))
	closest := 0.0
	for range 150 {
		n, most := 2+r.Int64N(6), 2+r.Int64N(3)
		p := trialPlan(Law{Rate: 0.05 + 0.4*r.Float64()}, n, [2]int64{1, most})
		p.PerYear = 1000 * math.Exp(-1-4*r.Float64())
		l, err := Solve(p)
		if err != nil {
			t.Fatal(err)
		}
		x := trialsPart(t, p)
		sizes := make([]int64, 24)
		kind, all := r.IntN(4), 0.0
		for i := range sizes {
			switch kind {
			case 0:
				sizes[i] = 1 + r.Int64N(most)
			case 1:
				sizes[i] = 1 + int64(i%2)*(most-1)
			case 2:
				sizes[i] = 1 + int64(i/5%2)*(most-1)
			case 3:
				sizes[i] = 1
			}
			all += float64(sizes[i])
		}
		alpha := l.Parts[0].Alpha
		if alpha == 0 {
			continue
		}
		got := batches{n, p.Law.Rate, func(trials int64) critical { return x.model.critical(load{size: float64(trials)}, alpha) }}.openings(sizes)
		want := l.PerYear / 1000 * all
		if got > want*(1+1e-9) {
			t.Errorf("seed %d: %d trials in batches of %v, %+v: %v open, at most %v are promised", seed, n, sizes, p.Law, got, want)
		}
		if want > 0 {
			closest = max(closest, got/want)
		}
	}
	t.Logf("the closest opened %.2f of what was promised", closest)
	if closest < 0.5 {
		t.Errorf("seed %d: the closest opened %v of what was promised: the bound is of no use", seed, closest)
	}
}

// TestTrialsEvenNeverMore is the same where all batches are alike: then what is
// predicted is exact but for the first full window, which signals, perhaps without
// an event in its last batch, as often as a first look does at most.
func TestTrialsEvenNeverMore(t *testing.T) {
	for _, b := range []int64{1, 2, 3} {
		p := trialPlan(Law{Rate: 0.15}, 6, [2]int64{b, b})
		p.PerYear, p.Starts = 20, 0
		l, err := Solve(p)
		if err != nil {
			t.Fatal(err)
		}
		x := trialsPart(t, p)
		k := x.model.critical(x.now, l.Parts[0].Alpha)
		sizes := make([]int64, 40)
		for i := range sizes {
			sizes[i] = b
		}
		filled := int(6 / b)
		life := batches{6, 0.15, func(int64) critical { return k }}
		first := life.openings(sizes[:filled])
		got, want := life.openings(sizes)-first, l.PerYear/1000*float64(int64(len(sizes)-filled)*b)
		if most := want + x.evenBatches(x.model, k).first - first; got < want*(1-1e-12) || got > most*(1+1e-12) {
			t.Errorf("batches of %d: %v open, want %v, at most %v", b, got, want, most)
		}
	}
}

// TestTrialsLimits: the limit is that of the smallest count whose crossings fit,
// also on average over an estimate, beside looks at slots, and for a window that
// is never looked at.
func TestTrialsLimits(t *testing.T) {
	p := trialPlan(Law{Rate: 0.01}, 200, [2]int64{})
	p.Volume, p.SlotsPerYear, p.PerYear, p.Starts = 8, 365.2425, 0.5, 0.5
	l, err := Solve(p)
	if err != nil {
		t.Fatal(err)
	}
	perYear := func(k int64) float64 {
		return 8*365.2425*exact.TrialCrossing(0.01, 200, k) + 0.5*exact.NewBinomial(200, 0.01).Upper(k)
	}
	a := l.Parts[0]
	if math.Abs(a.PerYear-perYear(a.Critical)) > 1e-12 || a.PerYear > 0.5 || perYear(a.Critical-1) <= 0.5 || a.Basis != Exact {
		t.Errorf("%+v, and one fewer brings %v", a, perYear(a.Critical-1))
	}
	if size := p.Size(&a, a.Critical); math.Abs(size-a.Size) > 1e-15 || !exact.AtMost(size, a.Alpha) {
		t.Errorf("the size of %d is %v, told %v", a.Critical, size, a.Size)
	}
	q := *p
	q.Batch = [2]int64{1, 12}
	if m, err := Solve(&q); err != nil || m.PerYear > 0.5 || m.Parts[0].Critical < a.Critical || m.Parts[0].Basis != Bound {
		t.Errorf("batches of 1 to 12: %+v, %v", m, err)
	}
	q = *p
	q.PerYear, q.Volume = 1e6, 20 // more than ever come: only counts beyond the mean are tried
	for _, q.Batch = range [][2]int64{{1, 1}, {4, 4}, {1, 4}} {
		if m, err := Solve(&q); err != nil || m.Parts[0].Critical < 3 || m.Parts[0].Size > 0.5 {
			t.Errorf("any number allowed, batches of %v: %+v, %v", q.Batch, m, err)
		}
	}
	q = *p
	q.Law = Law{Proportion: true, Estimated: true, Events: 20, Exposure: 2000}
	if m, err := Solve(&q); err != nil || m.PerYear > 0.5 || m.Parts[0].Critical <= a.Critical || m.Parts[0].Basis != Average || m.High < 2*m.PerYear {
		t.Errorf("estimated: %+v, %v", m, err)
	}
	q = *p
	q.Exposure, q.Windows = 8, []Window{{Slots: 28, Step: 1, Slot: true}, {Trials: 200, Arrival: true}, {Trials: 50}}
	m, err := Solve(&q)
	if err != nil || len(m.Parts) != 2 || m.Parts[1].Window != 1 || !m.Parts[1].Arrival || m.PerYear > 0.5 {
		t.Errorf("beside looks at slots: %+v, %v", m, err)
	}
	for _, w := range []Window{{Trials: -1, Arrival: true}, {Trials: 5, Slot: true, Arrival: true}, {Trials: 5}} {
		q.Windows = []Window{w}
		if _, err := Solve(&q); !errors.Is(err, ErrPlan) {
			t.Errorf("%+v: %v", w, err)
		}
	}
	q.Windows, q.Law.Spread = []Window{{Trials: 5, Arrival: true}}, 2
	if _, err := Solve(&q); !errors.Is(err, ErrPlan) {
		t.Errorf("with spread: %v", err)
	}
}

// TestTrialsAveraged holds the average over an estimate against a fine quadrature
// of the beta density.
func TestTrialsAveraged(t *testing.T) {
	x := trialsPart(t, trialPlan(Law{Estimated: true, Events: 7, Exposure: 350}, 120, [2]int64{}))
	density := func(theta float64) float64 {
		return math.Exp(lgamma(351) - lgamma(8) - lgamma(343) + 7*math.Log(theta) + 342*math.Log1p(-theta))
	}
	for _, k := range []int64{5, 8, 12} {
		want := integrate(density, func(theta float64) float64 { return exact.TrialCrossing(theta, 120, k) }, 1e-9, 0.4)
		if got := x.evenBatches(x.model, critical{k, true}).look; math.Abs(got-want) > 1e-8*want {
			t.Errorf("%d of the last 120: %v, want %v", k, got, want)
		}
	}
}
