package allowance

import (
	"math"

	"tailbell/exact"
)

// anywhere is the most that a steady exposure in the plan's range can cost: in
// each stretch with the same critical count it is at that end where chance
// reaches it most easily.
func (x *part) anywhere(m *model, t *turn, alpha float64) cost {
	var worst cost
	whole := x.stretches(m, t.now, x.plan.least(), 1, alpha, func(k int64, f float64) {
		scaled := turn{
			leaving: t.leaving.times(f), shared: t.shared.times(f), entering: t.entering.times(f),
			before: t.before.times(f), now: t.now.times(f),
		}
		worst = worst.atLeast(x.crossing(m, &scaled, critical{k, true}, critical{k, true}))
	})
	return x.limited(m, worst, alpha, whole)
}

// extremes are the least and the most that a slot's exposure may be, relative to
// what is planned for.
func (x *part) extremes() (least, most float64) {
	return x.plan.least() * max(0, 1-x.plan.Vary), 1 + x.plan.Vary
}

// bound is the most that a look can cost whatever the exposures of its slots and
// the look before it were. Given how much is expected in all, an alert in the
// upper tail is likeliest where the new slots bring as much of it as they can.
func (x *part) bound(m *model, t *turn, alpha float64) cost {
	least, most := x.extremes()
	if t.low > 0 {
		least *= t.low
	}
	varies := x.plan.Vary > 0 || x.plan.least() < 1
	switch {
	case varies && t.now.mixed != nil:
		// Which trials of which slots are more or fewer is not followed up.
		now := m.critical(t.now, alpha)
		return x.limited(m, x.crossing(m, t, critical{}, now), alpha, false)
	case m.fair && m.tail == Upper && t.now.mixed == nil:
		// Where new slots nearly always bring an event, its having entered says little.
		if m.counts(m.middle(), x.scaled(t.slots, most)).PMF(0) < 0.02 {
			return x.limited(m, cost{}, alpha, false)
		}
	}
	var worst cost
	whole := x.stretches(m, t.now, least, most, alpha, func(k int64, f float64) {
		now := x.scaled(t.now, f)
		fresh, older := x.split(now, t, most)
		worst = worst.atLeast(cost{m.opens(now, fresh, older, k), m.signals(now, k)})
	})
	return x.limited(m, worst, alpha, whole)
}

// limited takes the limit on p itself as the cost where that is less, or where
// not every critical count was tried.
func (x *part) limited(m *model, c cost, alpha float64, whole bool) cost {
	most := alpha * roundUp
	switch {
	case !m.fair:
		return c
	case !whole:
		return cost{most, most}
	}
	return cost{min(c.look, most), min(c.first, most)}
}

// roundUp is the room that exact.AtMost leaves.
const roundUp = 1 + 0x1p-47

// split gives the new slots as much of a window as they can have.
func (x *part) split(now load, t *turn, most float64) (fresh, older load) {
	if now.mixed != nil {
		return t.slots, t.older // mixed trials don't vary
	}
	fresh = load{size: min(x.scaled(t.slots, most).size, now.size)}
	return fresh, load{size: now.size - fresh.size}
}

// scaled multiplies an exposure; trials are rounded up.
func (x *part) scaled(l load, f float64) load {
	switch {
	case l.mixed != nil:
		return l
	case x.plan.Law.Proportion:
		return load{size: math.Ceil(float64(l.size * f))}
	}
	return l.times(f)
}

// beyond leaves room for rounding on the side of more false alerts.
const beyond = 1 + 0x1p-40

// manyStretches is how many critical counts a range of exposures may have before
// they are no longer all tried.
const manyStretches = 400

// stretches calls use for the critical counts that a window has while its
// exposure is between low and high times the load's, each with that factor at
// which chance reaches it most easily while it still is the critical count. It
// reports whether it called it for all of them.
func (x *part) stretches(m *model, l load, low, high, alpha float64, use func(k int64, f float64)) bool {
	largest := m.critical(x.scaled(l, high), alpha)
	if !largest.ok {
		return true // where the largest exposure can't signal, none can
	}
	if low == high || l.mixed != nil {
		use(largest.k, high)
		return true
	}
	least := m.critical(x.scaled(l, low), alpha)
	if !least.ok && m.tail == Upper {
		least.k = 1
	} else if !least.ok {
		least.k = 0
	}
	stride := 1 + (largest.k-least.k)/manyStretches
	for k := largest.k; k > least.k; k -= stride {
		use(k, x.end(m, l, low, high, k, alpha))
	}
	use(least.k, x.end(m, l, low, high, least.k, alpha))
	return stride == 1
}

// end is the factor between low and high up to which a count signals in the
// upper tail, or from which on it does in the lower; or a little beyond it.
func (x *part) end(m *model, l load, low, high float64, k int64, alpha float64) float64 {
	if law := &m.law; !law.Proportion && !law.Estimated && law.spread() == 1 {
		mean := float64(m.nodes[0].rate * l.size)
		if m.tail == Upper {
			return min(high, max(low, exact.MeanLower(k, alpha)/mean*beyond))
		}
		return max(low, min(high, exact.MeanUpper(k, alpha)/mean/beyond))
	}
	signals := func(f float64) bool { return exact.AtMost(m.size(x.scaled(l, f), k), alpha) }
	inside, outside := low, high
	if m.tail == Lower {
		inside, outside = high, low
	}
	if signals(outside) {
		return outside
	}
	for range 26 {
		middle := inside + (outside-inside)/2
		if signals(middle) {
			inside = middle
		} else {
			outside = middle
		}
	}
	if x.plan.Law.Proportion && l.size < 1<<20 {
		return inside // one trial more would be a trial too many
	}
	return outside
}
