package allowance

import (
	"math"
	"testing"

	"tailbell/exact"
)

// onlyPart is the cost of one part of a plan under a limit on p.
func onlyPart(t *testing.T, p *Plan, tail Tail, alpha float64) cost {
	t.Helper()
	q := *p
	q.PerYear = 1
	if err := q.Check(); err != nil {
		t.Fatal(err)
	}
	for _, x := range q.parts() {
		if x.tail == tail {
			return x.cost(alpha)
		}
	}
	t.Fatal("no such part")
	return cost{}
}

// TestReferencePoints holds two figures that were confirmed by simulation before
// any of this was written.
func TestReferencePoints(t *testing.T) {
	p := Plan{Law: Law{Rate: 2. / 28}, Exposure: 1, Windows: []Window{{Slots: 28, Step: 1, Slot: true}}, Upper: true, SlotsPerYear: 365.2425}
	if got := onlyPart(t, &p, Upper, exact.Poisson{Rate: 2, Exposure: 1}.Upper(7)).look; math.Abs(got-0.000750158) > 5e-10 {
		t.Errorf("28 slots with mean 2, from 7 on: %v a look", got)
	}
	p = Plan{Law: Law{Rate: 1}, Exposure: 1, Windows: []Window{{Slots: 2, Step: 1, Arrival: true}}, Upper: true, SlotsPerYear: 1}
	if got := onlyPart(t, &p, Upper, exact.Poisson{Rate: 2, Exposure: 1}.Upper(7)).look; math.Abs(got-0.0120298) > 5e-8 {
		t.Errorf("spans of 2 with rate 1, from 7 on: %v a unit of time", got)
	}
}

// slotLaw gives the probabilities of the counts in one slot, 0 to most.
type slotLaw func(slot int) []float64

// enumerate adds up the probability of all states of the slots of two
// neighbouring looks, the later of which ends with the slot at: signals(k) says
// whether a count signals at that look.
func enumerate(slots slotLaw, at, length, step int, before, now func(count int) bool) float64 {
	span := max(length, 0) + step // slots at-span+1 .. at
	total := 0.0
	var walk func(i, older, newer int, p float64)
	walk = func(i, older, newer int, p float64) {
		if i == span {
			if !before(older) && now(newer) {
				total += p
			}
			return
		}
		inOld, inNew := i < length, i >= step
		for k, q := range slots(at - span + 1 + i) {
			o, n := older, newer
			if inOld {
				o += k
			}
			if inNew {
				n += k
			}
			walk(i+1, o, n, p*q)
		}
	}
	walk(0, 0, 0, 1)
	return total
}

func poissonSlots(p *Plan) slotLaw {
	return func(slot int) []float64 {
		l := exact.Poisson{Rate: p.Law.Rate, Exposure: p.Exposure * p.factor(slot)}
		var list []float64
		for k := int64(0); k < 2 || l.Upper(k) > 1e-15; k++ {
			list = append(list, l.PMF(k))
		}
		return list
	}
}

func binomialSlots(p *Plan) slotLaw {
	return func(slot int) []float64 {
		l := exact.NewBinomial(int64(p.Exposure), timesOdds(p.Law.Rate, p.factor(slot)))
		list := make([]float64, int(p.Exposure)+1)
		for k := range list {
			list[k] = l.PMF(int64(k))
		}
		return list
	}
}

// TestEnumerated compares the cost of a look with the sum over all states, for
// steady and changing expectations, steps shorter and longer than the window,
// both measures and both tails. Where the expectation changes, so do critical
// counts, and a look may signal though nothing new came: shared counts between
// the two must not be forgotten.
func TestEnumerated(t *testing.T) {
	plans := map[string]Plan{
		"steady":           {Law: Law{Rate: 0.3}, Exposure: 0.8},
		"cycle":            {Law: Law{Rate: 0.3}, Exposure: 0.8, Cycle: []float64{2.5, 0.2, 0.3, 1}},
		"proportion":       {Law: Law{Rate: 0.2, Proportion: true}, Exposure: 3},
		"proportion cycle": {Law: Law{Rate: 0.2, Proportion: true}, Exposure: 3, Cycle: []float64{4, 0.2, 0.5}},
	}
	fell := false
	for name, p := range plans {
		for _, w := range []Window{{Slots: 3, Step: 1}, {Slots: 3, Step: 2}, {Slots: 2, Step: 3}, {Slots: 1, Step: 1}} {
			w.Slot = true
			p.Windows, p.Upper, p.Lower, p.SlotsPerYear = []Window{w}, true, true, 100
			slots := poissonSlots(&p)
			if p.Law.Proportion {
				slots = binomialSlots(&p)
			}
			for _, alpha := range []float64{0.4, 0.2, 0.1, 0.03, 0.004} {
				for _, tail := range []Tail{Upper, Lower} {
					got := onlyPart(t, &p, tail, alpha).look
					want, falls := enumerated(&p, w, tail, alpha, slots)
					fell = fell || falls
					if math.Abs(got-want) > 1e-12 {
						t.Errorf("%s, %+v, tail %d, limit %v: %v, enumerated %v", name, w, tail, alpha, got, want)
					}
				}
			}
		}
	}
	if !fell {
		t.Error("in no case did a critical count fall")
	}
}

// enumerated is the mean over the cycle in its worst phase, and whether a
// critical count fell by the way.
func enumerated(p *Plan, w Window, tail Tail, alpha float64, slots slotLaw) (worst float64, fell bool) {
	m := newModel(p, tail, p.load(0, 0, w.Slots, p.known))
	length := max(1, len(p.Cycle))
	phases := divisor(length, w.Step)
	for phase := range phases {
		sum, n := 0.0, 0
		for at := phase; at < length; at += phases {
			before, now := m.critical(p.load(at-w.Step, 0, w.Slots, p.known), alpha), m.critical(p.load(at, 0, w.Slots, p.known), alpha)
			fell = fell || tail == Upper && before.ok && now.ok && now.k < before.k
			signals := func(c critical) func(int) bool {
				return func(count int) bool {
					return c.ok && (tail == Upper && int64(count) >= c.k || tail == Lower && int64(count) <= c.k)
				}
			}
			// Slots between two windows that do not touch play no part.
			if w.Step > w.Slots {
				sum += apart(slots, at, w, signals(before), signals(now))
			} else {
				sum += enumerate(slots, at, w.Slots, w.Step, signals(before), signals(now))
			}
			n++
		}
		worst = max(worst, sum/float64(n))
	}
	return worst, fell
}

func apart(slots slotLaw, at int, w Window, before, now func(int) bool) float64 {
	never := func(int) bool { return false }
	silent := enumerate(slots, at-w.Step, w.Slots, 0, never, func(c int) bool { return !before(c) })
	return silent * enumerate(slots, at, w.Slots, 0, never, now)
}

// TestSlowReportsEnumerated holds what is newly known of shared slots against
// all states: two slots to a window, of each a part is known at once and the
// rest a slot later.
func TestSlowReportsEnumerated(t *testing.T) {
	const mean, share, most = 0.9, 0.4, 16
	p := Plan{
		Law: Law{Rate: 1}, Exposure: mean, Known: []float64{share}, Windows: []Window{{Slots: 2, Step: 1, Slot: true}},
		Upper: true, Lower: true, SlotsPerYear: 100,
	}
	all, soon, later := exact.Poisson{Rate: mean, Exposure: 1}, exact.Poisson{Rate: mean, Exposure: share}, exact.Poisson{Rate: mean, Exposure: 1 - share}
	for _, tail := range []Tail{Upper, Lower} {
		for _, alpha := range []float64{0.35, 0.1, 0.01} {
			m := newModel(&p, tail, p.load(0, 0, p.Windows[0].Slots, p.known))
			c := m.critical(p.load(0, 0, 2, p.known), alpha)
			if !c.ok {
				continue
			}
			signals := func(k int64) bool { return tail == Upper && k >= c.k || tail == Lower && k <= c.k }
			want := 0.0
			for a := range int64(most) { // the oldest slot, known in full
				for b := range int64(most) {
					for d := range int64(most) { // what comes late of it
						for e := range int64(most) { // the newest
							if !signals(a+b) && signals(b+d+e) {
								want += all.PMF(a) * soon.PMF(b) * later.PMF(d) * soon.PMF(e)
							}
						}
					}
				}
			}
			if got := onlyPart(t, &p, tail, alpha).look; math.Abs(got-want) > 1e-12 {
				t.Errorf("tail %d, limit %v: %v, enumerated %v", tail, alpha, got, want)
			}
		}
	}
}

// TestCrossingsCutShort compares sums that stop where nothing more matters with
// those over all terms.
func TestCrossingsCutShort(t *testing.T) {
	for _, mean := range []float64{0.01, 1, 30, 400} {
		for _, part := range []float64{0.01, 0.3, 1} {
			slot := exact.Poisson{Rate: mean, Exposure: part}
			shared := exact.Poisson{Rate: mean, Exposure: 1 - part}
			for _, z := range []float64{0.5, 3, 6} {
				k := int64(mean + z*math.Sqrt(mean) + 1)
				for _, before := range []int64{k - 1, k, k + 2} {
					got, want := crossUpper(slot, shared, slot, before, k), exact.CrossingUpper(slot, shared, slot, before, k)
					if math.Abs(got-want) > 1e-13*want {
						t.Errorf("upper, mean %v, part %v, %d after %d: %v, all terms %v", mean, part, k, before, got, want)
					}
					low := max(0, int64(mean-z*math.Sqrt(mean)))
					got, want = crossLower(slot, shared, slot, max(0, low+before-k), low), exact.CrossingLower(slot, shared, slot, max(0, low+before-k), low)
					if math.Abs(got-want) > 1e-13*want {
						t.Errorf("lower, mean %v, part %v, %d: %v, all terms %v", mean, part, low, got, want)
					}
				}
			}
		}
	}
}
