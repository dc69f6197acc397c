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
}

// turns are the looks of a window over the plan's cycle, for each phase in which
// looks and cycle may stand to each other.
func (p *Plan) turns(w Window) [][]turn {
	length := max(1, len(p.Cycle))
	apart := divisor(length, w.Step)
	phases := make([][]turn, apart)
	for at := range length {
		phases[at%apart] = append(phases[at%apart], p.turn(w, at))
	}
	return phases
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
