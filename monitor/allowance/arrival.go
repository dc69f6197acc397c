package allowance

import "tailbell/exact"

// arrivals is the cost of arrival looks in a slot of a steady process: how often
// an event, or the events of a message, bring those of the window to k.
func (x *part) arrivals(m *model, exposure float64, now critical) cost {
	if !now.ok {
		return cost{}
	}
	var c cost
	span := float64(x.window.Slots)
	for _, n := range m.nodes {
		rates := x.messages(n.rate*exposure, now.k)
		c.look += float64(n.weight * exact.ArrivalCrossings(rates, span, now.k))
		c.first += float64(n.weight * x.reach(rates, span, now.k))
	}
	return c
}

// messages are the rates of messages with 1, 2, ... events a slot, all those
// with k or more together in the k-th. A spread makes clusters of logarithmic
// size: that is the process whose counts are negative binomial with the same
// variance over mean in any span.
func (x *part) messages(events float64, k int64) []float64 {
	if spread := x.plan.Law.spread(); spread > 1 {
		return clusters(events, spread, k)
	}
	if len(x.plan.Messages) < 2 {
		return []float64{events}
	}
	mean := 0.0
	for i, s := range x.plan.Messages {
		mean += float64(float64(i+1) * s)
	}
	rates := make([]float64, min(int64(len(x.plan.Messages)), k))
	for i, s := range x.plan.Messages {
		rates[min(i, len(rates)-1)] += float64(float64(events/mean) * s)
	}
	return rates
}

// clusters: of size j at the rate events/(phi-1) (1-1/phi)^j / j.
func clusters(events, phi float64, k int64) []float64 {
	k = min(k, 1<<16)
	p, power := 1-1/phi, 1.0
	rates := make([]float64, k)
	all := -exact.Binomial{N: 1, P: 1 / phi, Q: p}.LogPMF(1) // log phi
	for j := int64(1); j < k; j++ {
		power *= p
		share := power / float64(j)
		rates[j-1] = events / (phi - 1) * share
		all -= share
	}
	rates[k-1] += float64(events / (phi - 1) * max(0, all))
	return rates
}

// anyArrival bounds the cost of arrival looks in a slot that brings fresh, while
// the window never holds more than before and its critical count is k: an alert
// opens at most at each message after which it signals.
func (x *part) anyArrival(m *model, window, fresh load, k int64) cost {
	var c cost
	for _, n := range m.nodes {
		rates := x.messages(n.rate*fresh.size, k)
		held := newHeld(x.messages(n.rate*window.size, k), k)
		for j, r := range rates {
			c.look += float64(float64(n.weight*r) * held.atLeast(k-int64(j)-1))
		}
		c.first += float64(n.weight * held.atLeast(k))
	}
	return c
}

// boundArrivals is anywhere and bound for arrival looks: while a slot passes, the window
// holds a share of it and of the oldest.
func (x *part) boundArrivals(m *model, t *turn, alpha float64) cost {
	full, low := t.now, min(t.now.size, t.before.size)/max(t.now.size, t.before.size)
	if t.before.size > t.now.size {
		full = t.before
	}
	least, most := x.extremes()
	fresh := t.slots.times(most)
	var worst cost
	whole := x.stretches(m, full, least*low, most, alpha, func(k int64, f float64) {
		if x.banded() {
			worst = worst.atLeast(x.arrivals(m, x.plan.Exposure*f, critical{k, true}))
			return
		}
		worst = worst.atLeast(x.anyArrival(m, full.times(f), fresh, k))
	})
	if !whole { // the cost changes slowly from one count to the next of so many
		worst.look *= 1.02
		worst.first *= 1.02
	}
	return worst
}

// reach is the chance that a steady window holds k events.
func (x *part) reach(rates []float64, span float64, k int64) float64 {
	inside := make([]float64, len(rates))
	for i, r := range rates {
		inside[i] = r * span
	}
	return newHeld(inside, k).atLeast(k)
}

// held is the law of the events in a window: a Poisson law, or that of messages
// of several events, as the probabilities of fewer than k.
type held struct {
	single exact.Poisson
	below  []float64
}

// newHeld is that law where messages of j events have the mean means[j-1].
func newHeld(means []float64, k int64) held {
	if len(means) == 1 {
		return held{single: exact.Poisson{Rate: means[0], Exposure: 1}}
	}
	return held{below: exact.CompoundPoisson(means, k)}
}

// atLeast is the chance of n events or more, for n up to k.
func (h held) atLeast(n int64) float64 {
	if h.below == nil {
		return h.single.Upper(n)
	}
	sum := 0.0
	for _, q := range h.below[:max(0, n)] {
		sum += q
	}
	return max(0, 1-sum)
}
