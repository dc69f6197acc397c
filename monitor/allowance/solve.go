package allowance

// Solve finds the limits of a plan. Its shares are equal at first; what then is
// left over goes to the part whose limit grows most by the step, again and again
// (the first of equals). Errors wrap ErrPlan.
func Solve(p *Plan) (Limits, error) {
	if err := p.Check(); err != nil {
		return Limits{}, err
	}
	parts := p.parts()
	alphas, costs := make([]float64, len(parts)), make([]float64, len(parts))
	spent := 0.0
	for i, x := range parts {
		alphas[i], costs[i] = x.solve(p.PerYear / float64(len(parts)))
		spent += costs[i]
	}
	fill(parts, alphas, costs, p.PerYear)
	return p.limits(parts, alphas), nil
}

// Predict says what given limits on p bring, one for each part in the order of
// Limits.Parts; a single one holds for all. PerYear of the plan means nothing.
func Predict(p *Plan, alphas ...float64) (Limits, error) {
	q := *p
	if q.PerYear == 0 {
		q.PerYear = 1
	}
	if err := q.Check(); err != nil {
		return Limits{}, err
	}
	parts := q.parts()
	if len(alphas) != 1 && len(alphas) != len(parts) {
		return Limits{}, fault("%d limits for %d parts", len(alphas), len(parts))
	}
	each := make([]float64, len(parts))
	for i := range each {
		if each[i] = alphas[i%len(alphas)]; !(each[i] >= 0 && each[i] < 1) {
			return Limits{}, fault("a limit on p of %v", each[i])
		}
	}
	return q.limits(parts, each), nil
}

// Size is the p-value that a count would have in the part's window at the
// plan's exposure: what Alpha would have to be for it to signal.
func (p *Plan) Size(part *Part, k int64) float64 {
	window := p.load(0, 0, p.Windows[part.Window].Slots, p.known)
	if p.Windows[part.Window].Trials > 0 {
		window = p.trial(part.Window).now
	}
	return newModel(p, part.Tail, window).size(window, k)
}

// fill spends what is left of a year's allowance.
func fill(parts []*part, alphas, costs []float64, perYear float64) {
	left := make([]bool, len(parts)) // parts that had no further step last time
	for range 64 * len(parts) {
		spent := 0.0
		for _, c := range costs {
			spent += c
		}
		best, gain, next, price := -1, 1.0, 0.0, 0.0
		for i, x := range parts {
			if left[i] {
				continue
			}
			alpha, cost := x.step(alphas[i], costs[i]+(perYear-spent))
			if alpha <= alphas[i] || spent-costs[i]+cost > perYear {
				left[i] = true // nothing becomes cheaper, and there is never more left
				continue
			}
			if g := alpha / max(alphas[i], 1e-300); g > gain {
				best, gain, next, price = i, g, alpha, cost
			}
		}
		if best < 0 {
			return
		}
		alphas[best], costs[best] = next, price
	}
}

// counted reports that the limits to choose from are those of single counts.
func (x *part) counted() bool { return x.steady() && !x.bounded() }

// solve returns the largest limit on p whose cost fits into a share of false
// alerts a year, and the cost; 0 where none does.
func (x *part) solve(share float64) (alpha, perYear float64) {
	if x.model.law.Estimated && x.model.law.oneSided(x.tail) {
		return 0, 0
	}
	if x.counted() {
		return x.solveCount(share)
	}
	return x.solveLimit(share)
}

// step is a larger limit whose cost still fits: that of the next count, or the
// largest.
func (x *part) step(alpha, share float64) (next, perYear float64) {
	if !x.counted() {
		return x.solve(share)
	}
	window := x.now
	now := x.model.critical(window, alpha)
	if !now.ok {
		return x.solve(share)
	}
	k := now.k - 1
	if x.tail == Lower {
		k = now.k + 1
	}
	if next, perYear, ok := x.priced(k); ok && perYear <= share {
		return next, perYear
	}
	return 0, 0
}

// priced is the limit under which a count is the critical one, and its cost; ok
// is false outside the branch in which rarer counts cost less.
func (x *part) priced(k int64) (alpha, perYear float64, ok bool) {
	if !x.branch(k) {
		return 0, 0, false
	}
	window := x.now
	alpha = x.model.size(window, k)
	if !(alpha > 0 && alpha < 0.5) {
		return 0, 0, false
	}
	if x.ofTrials() {
		return alpha * ample, x.perYear(x.evenBatches(x.model, critical{k, true})), true
	}
	if x.arrival {
		return alpha * ample, x.perYear(x.arrivals(x.model, x.plan.Exposure, critical{k, true})), true
	}
	c := x.crossing(x.model, x.first(), critical{k, true}, critical{k, true})
	return alpha * ample, x.perYear(c), true
}

// ample is room for rounding above the size of a count: its neighbour's is far
// away.
const ample = 1 + 0x1p-30

// branch reports whether a count lies beyond the mean of a window. On the near
// side of it the window nearly always signals and seldom crosses: the crossings
// would fit, and say nothing.
func (x *part) branch(k int64) bool {
	mean := x.model.mean(x.now)
	if x.tail == Upper {
		return float64(k) > mean && k >= 1
	}
	return float64(k) < mean && k >= 0
}

// solveCount tries counts: from one that surely is rare enough towards the mean,
// by halves.
func (x *part) solveCount(share float64) (alpha, perYear float64) {
	fits := func(k int64) bool {
		a, c, ok := x.priced(k)
		if ok && c <= share {
			alpha, perYear = a, c
		}
		return ok && c <= share
	}
	mean := x.model.mean(x.now)
	if x.tail == Lower {
		return x.fewest(fits, mean, &alpha, &perYear)
	}
	near := int64(mean) // is not beyond the mean
	far, stride := near+1, int64(1)
	for !fits(far) {
		if a := x.model.size(x.now, far); !(a > 0) || far > 1<<40 {
			return 0, 0
		}
		near = far
		far += stride
		stride *= 2
	}
	for far-near > 1 {
		if middle := near + (far-near)/2; fits(middle) {
			far = middle
		} else {
			near = middle
		}
	}
	fits(far)
	return alpha, perYear
}

// fewest is solveCount for the lower tail: the largest count under the mean that
// fits, if not even 0 is too frequent.
func (x *part) fewest(fits func(k int64) bool, mean float64, alpha, perYear *float64) (float64, float64) {
	if !fits(0) {
		return 0, 0
	}
	far, near := int64(0), int64(mean)+1
	for near-far > 1 {
		if middle := far + (near-far)/2; fits(middle) {
			far = middle
		} else {
			near = middle
		}
	}
	fits(far)
	return *alpha, *perYear
}

// grain is the relative step of limits that are not those of a single count.
const grain = 1 + 1.0/64

// solveLimit tries limits on p. The one at which looks signal as often as the
// share allows always fits, for no look crosses more often than it signals;
// where it doesn't (at a bound of an estimate) smaller ones are tried.
func (x *part) solveLimit(share float64) (alpha, perYear float64) {
	fits := func(a float64) bool {
		c := x.perYear(x.cost(a))
		if c <= share {
			alpha, perYear = a, c
		}
		return c <= share
	}
	low := min(0.49, share/(x.looks+x.plan.Starts)*(1-0x1p-40))
	for range 1000 {
		if fits(low) {
			break
		}
		low /= 2
	}
	if alpha == 0 || low < 1e-300 {
		return 0, 0
	}
	steps := 1
	grown := func(n int) float64 {
		a := low
		for range n {
			a *= grain
		}
		return a
	}
	for grown(steps) < 0.5 && fits(grown(steps)) {
		steps *= 2
	}
	least := steps / 2
	for steps-least > 1 {
		if middle := (least + steps) / 2; grown(middle) < 0.5 && fits(grown(middle)) {
			least = middle
		} else {
			steps = middle
		}
	}
	if least == 0 || steps == 1 {
		fits(low)
	} else {
		fits(grown(least))
	}
	return x.attained(alpha), perYear
}

// attained is the largest size under a limit that looks reach, where that is no
// more than a few counts, so that a little more exposure than was planned for
// does not lower a critical count. A bound holds for a range of exposures anyway.
func (x *part) attained(alpha float64) float64 {
	m, window := x.model, x.now
	switch {
	case x.bounded():
		return alpha
	case x.banded():
		low, high := m.critical(window.times(x.plan.least()), alpha), m.critical(window, alpha)
		if m.tail == Upper && high.ok && low == high {
			return m.size(window, high.k) * ample
		}
		return alpha
	}
	most := 0.0
	for _, turns := range x.phases {
		for i := range turns {
			if c := m.critical(turns[i].now, alpha); c.ok {
				most = max(most, m.size(turns[i].now, c.k)*ample)
			}
		}
	}
	return min(most, alpha)
}

// limits tells what limits on p come to.
func (p *Plan) limits(parts []*part, alphas []float64) Limits {
	var l Limits
	for i, x := range parts {
		a := x.predict(alphas[i])
		l.PerYear += a.PerYear
		l.Low += a.Low
		l.High += a.High
		l.Parts = append(l.Parts, a)
	}
	return l
}

// predict says what a limit on p comes to.
func (x *part) predict(alpha float64) Part {
	a := Part{Window: x.index, Tail: x.tail, Arrival: x.arrival, Alpha: alpha, Basis: x.basis()}
	if !(alpha > 0) {
		return a
	}
	window, law := x.now, &x.plan.Law
	if c := x.model.critical(window, a.Alpha); c.ok {
		a.Critical, a.HasCritical, a.Size = c.k, true, x.model.size(window, c.k)
	}
	a.PerYear = x.perYear(x.cost(a.Alpha))
	a.Low, a.High = a.PerYear, a.PerYear
	if law.Estimated {
		low, high := law.bounds(x.plan.Level)
		a.Low = x.perYear(x.costOf(x.model.at(low), a.Alpha))
		a.High = x.perYear(x.costOf(x.model.at(high), a.Alpha))
	}
	return a
}
