package allowance

// part is one window in one tail and way of looking, ready to be asked what a
// limit on p would cost.
type part struct {
	plan    *Plan
	index   int
	window  Window
	tail    Tail
	arrival bool
	model   *model
	phases  [][]turn
	now     load // the window at the beginning of the cycle
	// looks a year; for arrival looks slots, since their cost is by slot, or for
	// windows of trials those.
	looks float64
}

// cost is what a limit on p brings: per look (per slot for arrival looks),
// and at a first look.
type cost struct{ look, first float64 }

func (c cost) atLeast(d cost) cost { return cost{max(c.look, d.look), max(c.first, d.first)} }

func (x *part) perYear(c cost) float64 {
	return float64(x.looks*c.look) + float64(x.plan.Starts*c.first)
}

// parts are those of a plan, in the order of Limits.Parts.
func (p *Plan) parts() []*part {
	var list []*part
	for i, w := range p.Windows {
		if w.Trials > 0 {
			if w.Arrival {
				list = append(list, p.trial(i))
			}
			continue
		}
		window := p.load(0, 0, w.Slots, p.known)
		x := part{plan: p, index: i, window: w, phases: p.turns(w), looks: p.SlotsPerYear / float64(w.Step)}
		if w.Slot && p.Upper {
			list = append(list, x.in(Upper, window))
		}
		if w.Slot && p.Lower {
			list = append(list, x.in(Lower, window))
		}
		if w.Arrival {
			x.window.Step = 1
			x.arrival, x.phases, x.looks = true, p.turns(x.window), p.SlotsPerYear
			list = append(list, x.in(Upper, window))
		}
	}
	return list
}

// in is the part in one tail.
func (x part) in(tail Tail, window load) *part {
	x.tail, x.now, x.model = tail, window, newModel(x.plan, tail, window)
	if x.bounded() && !x.arrival && len(x.plan.Cycle) > 0 && !x.plan.Law.Proportion {
		x.phases = grouped(x.phases)
	}
	return &x
}

// steady reports that every look is like the others, so that only critical
// counts need be tried.
func (x *part) steady() bool {
	if x.ofTrials() {
		return x.even()
	}
	return len(x.plan.Cycle) == 0 && x.plan.Vary == 0 && x.plan.least() == 1
}

// banded reports an exposure that is steady somewhere in a range, of a law that
// takes any exposure.
func (x *part) banded() bool {
	return !x.ofTrials() && len(x.plan.Cycle) == 0 && x.plan.Vary == 0 && !x.plan.Law.Proportion
}

// basis says what the part's costs are.
func (x *part) basis() Basis {
	switch p := x.plan; {
	case x.model.approx || x.arrival && p.Law.spread() > 1:
		return Approximate
	case p.Law.Estimated && p.Assurance > 0:
		return Assured
	case p.Law.Estimated:
		return Average
	case x.bounded():
		return Bound
	}
	return Exact
}

// bounded reports that costs are bounds, not expectations.
func (x *part) bounded() bool {
	switch {
	case x.ofTrials():
		return !x.even()
	case x.steady(), x.banded():
		return x.large() && !x.arrival
	case x.arrival, len(x.plan.Cycle)*len(x.model.nodes) > longSums && !x.plan.Law.Proportion:
		return true
	}
	return x.plan.Vary > 0 || x.plan.least() < 1 || x.large()
}

// longSums is how many crossings a cycle may ask for, over slots and true rates,
// before they are bounded by groups of slots instead.
const longSums = 1000

// manyEvents is the expected count of a window from which crossings are bounded
// rather than summed.
const manyEvents = 50_000

func (x *part) large() bool { return x.model.mean(x.now) > manyEvents }

// first is the look at the beginning of the cycle.
func (x *part) first() *turn { return &x.phases[0][0] }

// cost is what a limit on p costs under the part's own model.
func (x *part) cost(alpha float64) cost { return x.costOf(x.model, alpha) }

// costOf is what it costs under another model of the true rate.
func (x *part) costOf(m *model, alpha float64) cost {
	if x.ofTrials() {
		return x.costOfTrials(m, alpha)
	}
	worst := cost{}
	for _, turns := range x.phases {
		var all cost
		weight := 0.0
		for i := range turns {
			c, n := x.costAt(m, &turns[i], alpha), turns[i].weight()
			all.look += float64(n * c.look)
			all.first = max(all.first, c.first)
			weight += n
		}
		all.look /= weight
		worst = worst.atLeast(all)
	}
	return worst
}

// costAt is what one look of the cycle costs.
func (x *part) costAt(m *model, t *turn, alpha float64) cost {
	switch {
	case x.arrival && x.steady():
		return x.arrivals(m, x.plan.Exposure, m.critical(t.now, alpha))
	case x.arrival:
		return x.boundArrivals(m, t, alpha)
	case x.bounded():
		return x.bound(m, t, alpha)
	case x.banded() && !x.steady():
		return x.anywhere(m, t, alpha)
	}
	before, now := m.critical(t.before, alpha), m.critical(t.now, alpha)
	return x.crossing(m, t, before, now)
}

// crossing is the cost of a look whose exposures are what they are.
func (x *part) crossing(m *model, t *turn, before, now critical) cost {
	if !now.ok {
		return cost{}
	}
	return cost{m.crosses(t, before, now), m.signals(t.now, now.k)}
}
