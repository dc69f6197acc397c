package allowance

import (
	"math"
	"math/rand/v2"
	"slices"
	"testing"
	"time"

	"tailbell/exact"
)

// life is the exact course of a series: the chance of each state of its window
// and its alert, slot by slot.
type life struct {
	plan  *Plan
	model *model
	tail  Tail
	alpha float64
	quiet int
}

// state is the counts of the latest slots, and how many more quiet looks an open
// alert needs (0: none is open).
type state struct {
	counts [3]int8
	open   int8
}

// openings is the expected number of alerts opened while slots with the given
// exposures pass, one look a slot over three of them: an alert opens at a look
// that signals while none is open (in the upper tail, if an event came with the
// new slot), and has returned after so many looks without a signal.
func (l life) openings(exposures []float64) float64 {
	chances := map[state]float64{{}: 1}
	opened := 0.0
	for t, e := range exposures {
		law := l.model.counts(l.model.nodes[0].rate, load{size: e})
		now := critical{}
		if t >= 2 {
			now = l.model.critical(load{size: exposures[t-2] + exposures[t-1] + e}, l.alpha)
		}
		next := map[state]float64{}
		for s, p := range chances {
			for k := int8(0); k < 12; k++ {
				q := law.PMF(int64(k))
				if k == 11 {
					q = law.Upper(11)
				}
				if q < 1e-18 {
					continue
				}
				n := state{[3]int8{s.counts[1], s.counts[2], k}, s.open}
				sum := int64(n.counts[0]) + int64(n.counts[1]) + int64(k)
				signals := now.ok && (l.tail == Upper && sum >= now.k || l.tail == Lower && sum <= now.k)
				switch {
				case signals && (s.open > 0 || l.tail == Lower || k > 0):
					if s.open == 0 {
						opened += p * q
					}
					n.open = int8(l.quiet)
				case !signals && s.open > 0:
					n.open = s.open - 1
				}
				next[n] += p * q
			}
		}
		chances = next
	}
	return opened
}

// course are the exposures of so many slots within a plan's profile: at random,
// to and fro, or in long stretches.
func course(p *Plan, r *rand.Rand, slots int) []float64 {
	list := make([]float64, slots)
	kind, steady := r.IntN(4), p.least()+(1-p.least())*r.Float64()
	for i := range list {
		f := 0.0 // from -1 to 1
		switch kind {
		case 0:
			f = 2*r.Float64() - 1
		case 1:
			f = float64(1 - 2*(i%2))
		case 2:
			f = float64(1 - 2*(i/7%2))
		case 3:
			f = float64(1 - 2*(i%4/3))
		}
		list[i] = p.Exposure * steady * (1 + p.Vary*f) * p.factor(i)
		if p.Law.Proportion {
			list[i] = math.Round(list[i])
			list[i] = max(math.Ceil(p.Exposure*p.least()*(1-p.Vary)), min(math.Floor(p.Exposure*(1+p.Vary)), list[i]))
		}
	}
	return list
}

// TestNeverMore follows series through whole lives exactly and holds the promise:
// whatever the exposures within the profile, no more alerts open than were
// predicted at most, and not more than the allowance.
func TestNeverMore(t *testing.T) {
	seed := uint64(time.Now().UnixNano())
	r := rand.New(rand.NewPCG(seed, 0))
	const slots = 30
	closest := 0.0
	for i := range 60 {
		p := Plan{
			Law: Law{Rate: 0.05 + 0.5*r.Float64()}, Exposure: 1, Windows: []Window{{Slots: 3, Step: 1, Slot: true}},
			SlotsPerYear: slots, Starts: 1, PerYear: math.Exp(-5 * r.Float64()), Upper: i%3 > 0, Lower: i%3 == 0,
		}
		if p.Lower {
			p.Law.Rate += 1
		}
		switch i % 5 {
		case 0:
			p.Vary = 0.9 * r.Float64()
		case 1:
			p.Least = 0.5 + 0.5*r.Float64()
		case 2:
			p.Cycle = []float64{1 + r.Float64(), r.Float64(), r.Float64(), 1}
		case 3:
			p.Law = Law{Rate: 0.05 + 0.2*r.Float64(), Proportion: true}
			p.Exposure, p.Vary = 4, 0.5
		}
		tail := Upper
		if p.Lower {
			tail = Lower
		}
		l, err := Solve(&p)
		if err != nil {
			t.Fatal(err)
		}
		if l.PerYear > p.PerYear {
			t.Errorf("seed %d, %d: %+v: %v predicted of %v allowed", seed, i, p, l.PerYear, p.PerYear)
		}
		if l.Parts[0].Alpha == 0 {
			continue
		}
		one := life{&p, newModel(&p, tail, p.load(0, 0, 3, p.known)), tail, l.Parts[0].Alpha, 1 + r.IntN(2)}
		exposures := course(&p, r, slots)
		got := one.openings(exposures)
		if l.PerYear > 0 {
			closest = max(closest, got/l.PerYear)
		}
		if got > l.PerYear*(1+1e-12) {
			t.Errorf("seed %d, %d: %+v: %v alerts open where %v are predicted at most; exposures %v", seed, i, p, got, l.PerYear, exposures)
		}
	}
	if closest < 0.5 {
		t.Errorf("seed %d: of what is predicted never more than the share %v came about", seed, closest)
	}
}

// TestBeyondTheMean: limits are looked for beyond the mean only. On its near side
// a window nearly always signals and seldom crosses, so that any count there
// would fit.
func TestBeyondTheMean(t *testing.T) {
	for _, mean := range []float64{0.1, 0.99, 2, 7.5, 40, 1000} {
		for _, perYear := range []float64{1e-4, 0.01, 0.3, 5, 200} {
			for _, vary := range []float64{0, 0.2} {
				p := Plan{
					Law: Law{Rate: mean / 30}, Exposure: 1, Windows: []Window{{Slots: 30, Step: 1, Slot: true}}, Vary: vary,
					Upper: true, Lower: true, SlotsPerYear: 365.2425, PerYear: perYear, Starts: 0.2,
				}
				l, err := Solve(&p)
				if err != nil {
					t.Fatal(err)
				}
				for _, part := range l.Parts {
					low := part.Tail == Lower
					if part.HasCritical && (!low && float64(part.Critical) <= mean || low && float64(part.Critical) >= mean || part.Size >= 0.5) {
						t.Errorf("mean %v, %v a year: %+v", mean, perYear, part)
					}
					if !low && part.Alpha == 0 {
						t.Errorf("mean %v, %v a year: too many events never signal", mean, perYear)
					}
				}
			}
		}
	}
}

// TestNextDoesNotFit: where only counts are tried, the next would be too many.
func TestNextDoesNotFit(t *testing.T) {
	p := Plan{
		Law: Law{Rate: 2. / 28}, Exposure: 1, Windows: []Window{{Slots: 28, Step: 1, Slot: true}, {Slots: 84, Step: 7, Slot: true}},
		Upper: true, Lower: true, SlotsPerYear: 365.2425, PerYear: 0.5, Starts: 0.2,
	}
	l, err := Solve(&p)
	if err != nil {
		t.Fatal(err)
	}
	alphas := make([]float64, len(l.Parts))
	for i := range l.Parts {
		alphas[i] = l.Parts[i].Alpha
	}
	for i := range l.Parts {
		part := &l.Parts[i]
		if !part.HasCritical {
			continue
		}
		next := part.Critical - 1
		if part.Tail == Lower {
			next = part.Critical + 1
		}
		more := append([]float64(nil), alphas...)
		more[i] = p.Size(part, next)
		if m, err := Predict(&p, more...); err != nil || m.PerYear <= p.PerYear {
			t.Errorf("part %d: %d would bring %v in all: %v", i, next, m.PerYear, err)
		}
	}
	same, err := Predict(&p, alphas...)
	if err != nil || same.PerYear != l.PerYear {
		t.Errorf("%v predicted for the limits themselves, %v when they were made: %v", same.PerYear, l.PerYear, err)
	}
}

// TestCache: what a cache answers for a plan holds for just that plan.
func TestCache(t *testing.T) {
	seed := uint64(time.Now().UnixNano())
	r := rand.New(rand.NewPCG(seed, 0))
	var c Cache
	for i := range 300 {
		p := Plan{
			Law: Law{Rate: 0.07}, Exposure: 0.8 + 0.4*r.Float64(), Windows: []Window{{Slots: 28, Step: 1, Slot: true}, {Slots: 84, Step: 7, Slot: true}},
			Upper: true, Lower: r.IntN(2) == 0, SlotsPerYear: 365.2425, PerYear: 0.2, Starts: 0.2,
		}
		switch i % 4 {
		case 1:
			p.Vary = float64(r.IntN(3)) / 20
		case 2:
			p.Law, p.Exposure = Law{Rate: 0.02, Proportion: true}, float64(4+r.IntN(30))
		case 3:
			p.Windows[0].Arrival = true
		}
		l, err := c.Limits(&p)
		if err != nil {
			t.Fatal(err)
		}
		alphas := make([]float64, len(l.Parts))
		for j := range l.Parts {
			alphas[j] = l.Parts[j].Alpha
		}
		got, err := Predict(&p, alphas...)
		if err != nil || got.PerYear > p.PerYear {
			t.Errorf("seed %d: %+v: %v a year of %v: %v", seed, p, got.PerYear, p.PerYear, err)
		}
		var fresh Cache
		again, err := fresh.Limits(&p)
		if err != nil || again.Parts[0].Alpha != l.Parts[0].Alpha {
			t.Errorf("seed %d: %+v: %v, and when asked first %v: %v", seed, p, l.Parts[0].Alpha, again.Parts[0].Alpha, err)
		}
	}
	if c.Solved > 200 {
		t.Errorf("%d of 300 plans were solved", c.Solved)
	}
	p := Plan{
		Law: Law{Estimated: true, Events: 36, Exposure: 20_000}, Exposure: 22.3, Vary: 0.2, Windows: []Window{{Slots: 28, Step: 1, Slot: true}},
		Upper: true, SlotsPerYear: 365.2425, PerYear: 0.2,
	}
	var err error
	if n := testing.AllocsPerRun(100, func() { _, err = c.Limits(&p) }); n > 0 || err != nil {
		t.Errorf("%v allocations for a plan that is known: %v", n, err)
	}
}

// TestReserve: newborn series together never exceed the reserve.
func TestReserve(t *testing.T) {
	const perYear, reserve = 2.0, 0.1
	sum := Share(perYear, reserve, 14) * 14
	for i := range 2000 {
		sum += Newborn(perYear, reserve, i)
	}
	if sum > perYear*(1+1e-12) || sum < perYear*0.999 {
		t.Errorf("%v of %v", sum, perYear)
	}
}

// TestUncounted: series that nobody has counted yet stay within the reserve together,
// as long as they are not more than those that were, or than a hundred.
func TestUncounted(t *testing.T) {
	const perYear, reserve = 2.0, 0.1
	for _, counted := range []int{0, 1, 40, 100, 101, 5000} {
		all := float64(counted) * Share(perYear, reserve, counted)
		for range max(counted, 100) {
			all += Uncounted(perYear, reserve, counted)
		}
		want := perYear
		if counted == 0 {
			want *= reserve
		}
		if math.Abs(all-want) > 1e-12*want {
			t.Errorf("%d counted: %v a year in all, want %v", counted, all, want)
		}
	}
}

// TestArrivalsAreTheLimitOfSlots: ever finer slots come to arrival looks.
func TestArrivalsAreTheLimitOfSlots(t *testing.T) {
	alpha := exact.Poisson{Rate: 2, Exposure: 1}.Upper(7)
	p := Plan{Law: Law{Rate: 1}, Exposure: 2. / 4096, Windows: []Window{{Slots: 4096, Step: 1, Slot: true, Arrival: true}}, Upper: true, SlotsPerYear: 2048}
	l, err := Predict(&p, alpha)
	if err != nil || math.Abs(l.Parts[0].PerYear-l.Parts[1].PerYear) > 2e-3*l.Parts[1].PerYear || math.Abs(l.Parts[1].PerYear-0.0120298) > 1e-7 {
		t.Errorf("%+v: %v", l, err)
	}
}

func BenchmarkCache(b *testing.B) {
	var c Cache
	p := Plan{
		Law: Law{Rate: 0.0018}, Exposure: 22.3, Vary: 0.2, Windows: []Window{{Slots: 28, Step: 1, Slot: true}, {Slots: 84, Step: 7, Slot: true}},
		Upper: true, SlotsPerYear: 365.2425, PerYear: 0.2,
	}
	b.ReportAllocs()
	for b.Loop() {
		if _, err := c.Limits(&p); err != nil {
			b.Fatal(err)
		}
	}
}

func BenchmarkSolve(b *testing.B) {
	known := Plan{
		Law: Law{Rate: 0.0018}, Exposure: 22.3, Windows: []Window{{Slots: 28, Step: 1, Slot: true}, {Slots: 84, Step: 7, Slot: true}},
		Upper: true, SlotsPerYear: 365.2425, PerYear: 0.2,
	}
	varying, estimated := known, known
	varying.Vary = 0.25
	estimated.Law = Law{Estimated: true, Events: 36, Exposure: 20_000}
	estimated.Vary = 0.25
	for name, p := range map[string]*Plan{"known": &known, "varying": &varying, "estimated": &estimated} {
		b.Run(name, func(b *testing.B) {
			for b.Loop() {
				if _, err := Solve(p); err != nil {
					b.Fatal(err)
				}
			}
		})
	}
}

// TestGroupedSlots: a long cycle is bounded group by group; that is never less
// than its crossings are, and not much more.
func TestGroupedSlots(t *testing.T) {
	cycle := make([]float64, 168)
	for i := range cycle {
		cycle[i] = 1 + 0.5*math.Sin(float64(i)*2*math.Pi/24)
	}
	p := Plan{
		Law: Law{Rate: 0.1}, Exposure: 1, Cycle: cycle, Windows: []Window{{Slots: 30, Step: 1, Slot: true}}, Upper: true,
		SlotsPerYear: 8766, PerYear: 1, Starts: 1,
	}
	long := p
	for range 9 { // the same cycle over and over
		long.Cycle = append(slices.Clone(cycle), long.Cycle...)
	}
	for _, alpha := range []float64{0.01, 1e-3, 1e-5} {
		exactly, err := Predict(&p, alpha)
		if err != nil {
			t.Fatal(err)
		}
		grouped, err := Predict(&long, alpha)
		if err != nil {
			t.Fatal(err)
		}
		a, b := exactly.Parts[0], grouped.Parts[0]
		if a.Basis != Exact || b.Basis != Bound || b.PerYear < a.PerYear || b.PerYear > 3*a.PerYear || a.Critical != b.Critical {
			t.Errorf("limit %v: %+v, in groups %+v", alpha, a, b)
		}
	}
}

// TestOneSided: beyond a reference without events nothing lies in the lower tail.
func TestOneSided(t *testing.T) {
	p := Plan{
		Law: Law{Estimated: true, Exposure: 1000}, Exposure: 20, Windows: []Window{{Slots: 28, Step: 1, Slot: true}}, Upper: true, Lower: true,
		SlotsPerYear: 365.2425, PerYear: 0.2,
	}
	for _, vary := range []float64{0, 0.3, 1.5} {
		p.Vary = vary
		l, err := Solve(&p)
		if err != nil || l.Parts[0].Alpha == 0 || l.Parts[1].Alpha != 0 || l.PerYear > 0.2 {
			t.Errorf("%+v, %v", l, err)
		}
	}
}
