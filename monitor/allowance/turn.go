package allowance

import "slices"

// turn is one look after the one before it: what leaves the window, what both
// share, and what is newly counted, be it of new slots or newly known of shared
// ones.
type turn struct {
	leaving, shared, entering load
	// before and now are the windows of the two looks, slots what the new slots
	// alone bring, and older what the window holds beside them.
	before, now, slots, older load
	// alike is how many looks of a cycle it stands for where they are grouped: now
	// and slots are then the largest of theirs, and low is the smallest window over
	// the largest.
	alike int
	low   float64
}

// weight is how many looks it stands for.
func (t *turn) weight() float64 { return float64(max(1, t.alike)) }

// grouped puts together looks whose windows and new slots expect about as much.
func grouped(phases [][]turn) [][]turn {
	list := make([][]turn, len(phases))
	for i, turns := range phases {
		type key struct{ now, slots float64 }
		at := map[key]int{}
		for j := range turns {
			t := &turns[j]
			now, _ := nearby(t.now.size * t.now.size) // 32 to the octave
			slots, _ := nearby(t.slots.size)
			k := key{now, slots}
			n, known := at[k]
			if !known {
				n = len(list[i])
				at[k] = n
				list[i] = append(list[i], turn{now: t.now, slots: t.slots, before: t.now, low: t.now.size})
			}
			g := &list[i][n]
			g.alike++
			g.now.size, g.slots.size, g.low = max(g.now.size, t.now.size), max(g.slots.size, t.slots.size), min(g.low, t.now.size)
		}
		for j := range list[i] {
			list[i][j].low /= list[i][j].now.size
		}
	}
	return list
}

// turns are the looks of a window over the plan's cycle, for each phase in which
// looks and cycle may stand to each other.
func (p *Plan) turns(w Window) [][]turn {
	length := max(1, len(p.Cycle))
	apart := divisor(length, w.Step)
	phases := make([][]turn, apart)
	look := func(at int) turn { return p.turn(w, at) }
	if len(p.Cycle) > 1 && len(p.Known) == 0 && !p.Law.Proportion {
		look = p.sums().turn(w)
	}
	for at := range length {
		phases[at%apart] = append(phases[at%apart], look(at))
	}
	return phases
}

// sums are the exposures of a cycle's slots, summed from its beginning.
type sums []float64

func (p *Plan) sums() sums {
	s := make(sums, len(p.Cycle)+1)
	for i, f := range p.Cycle {
		s[i+1] = s[i] + float64(p.Exposure*f)
	}
	return s
}

// upTo is the exposure of the slots before one, which may lie outside the cycle.
func (s sums) upTo(slot int) float64 {
	n := len(s) - 1
	whole := slot / n
	if slot%n < 0 {
		whole--
	}
	return float64(float64(whole)*s[n]) + s[slot-whole*n]
}

// turn is Plan.turn where everything is known at once.
func (s sums) turn(w Window) func(at int) turn {
	shared := max(0, w.Slots-w.Step)
	fresh := w.Slots - shared
	return func(at int) turn {
		between := func(from, to int) load { return load{size: s.upTo(to) - s.upTo(from)} }
		end, before := at+1, at+1-w.Step
		t := turn{
			leaving: between(before-w.Slots, before-shared), shared: between(before-shared, before), before: between(before-w.Slots, before),
			slots: between(end-fresh, end), now: between(end-w.Slots, end), older: between(end-w.Slots, end-fresh),
		}
		t.entering = t.slots
		return t
	}
}

func divisor(a, b int) int {
	for b > 0 {
		a, b = b, a%b
	}
	return a
}

// turn is the look at the window whose newest slot is the cycle's at.
func (p *Plan) turn(w Window, at int) turn {
	var t turn
	shared := max(0, w.Slots-w.Step)
	fresh := w.Slots - shared
	t.leaving = p.load(at-w.Step, shared, w.Slots, p.known)
	t.shared = p.load(at-w.Step, 0, shared, p.known)
	t.before = p.load(at-w.Step, 0, w.Slots, p.known)
	t.slots = p.load(at, 0, fresh, p.known)
	t.now = p.load(at, 0, w.Slots, p.known)
	t.older = p.load(at, fresh, w.Slots, p.known)
	t.entering = t.slots
	if len(p.Known) > 0 {
		later := p.load(at-w.Step, 0, shared, func(age int) float64 { return p.known(age+w.Step) - p.known(age) })
		t.entering.size += later.size
	}
	return t
}

// known is the share of a slot's events that is known where the slot is so many
// slots older than the newest.
func (p *Plan) known(age int) float64 {
	if age < len(p.Known) {
		return p.Known[age]
	}
	return 1
}

// load is the exposure of the slots at ages [from, to) of a window whose newest
// slot is the cycle's at.
func (p *Plan) load(at, from, to int, share func(age int) float64) load {
	switch n := len(p.Cycle); {
	case n == 0 && len(p.Known) == 0:
		return load{size: float64(p.Exposure * float64(to-from))}
	case p.Law.Proportion && n > 0:
		return p.mixed(at, from, to)
	}
	weight := 0.0
	for age := from; age < to; age++ {
		weight += float64(p.factor(at-age) * share(age))
	}
	return load{size: float64(p.Exposure * weight)}
}

func (p *Plan) factor(slot int) float64 {
	n := len(p.Cycle)
	if n == 0 {
		return 1
	}
	return p.Cycle[((slot%n)+n)%n]
}

// mixed sums the trials of each factor.
func (p *Plan) mixed(at, from, to int) load {
	list := make([]trials, 0, 16)
	for age := from; age < to; age++ {
		f := p.factor(at - age)
		i, found := slices.BinarySearchFunc(list, f, func(t trials, f float64) int {
			switch {
			case t.factor < f:
				return -1
			case t.factor > f:
				return 1
			}
			return 0
		})
		if !found {
			list = slices.Insert(list, i, trials{factor: f})
		}
		list[i].n += int64(p.Exposure)
	}
	return load{mixed: list}
}
