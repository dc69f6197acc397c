package monitor

import (
	"math"

	"tailbell/config"
	"tailbell/exact"
)

// edges say at which exposure each count stops to signal in the upper tail, or
// begins to in the lower one, under one baseline and limit. So many events are
// the less surprising the more exposure there is: a look is a comparison of
// its exposure with the edge of its count.
type edges struct {
	key edgeKey
	u   usual
	// at holds the edges by count, NaN where one is not known yet.
	at []float64
	// sure holds, by count, the grains of exposure beyond which a look surely
	// does not signal: more in the upper tail, fewer in the lower one.
	sure []uint64
	// chances are p-values that were asked for, each in a place by its key.
	chances []keptChance
}

// edgeKey is all that the edges depend on.
type edgeKey struct {
	base  *config.Baseline
	limit float64
	d     direction
}

const (
	// mostEdges is the count up to which edges are kept.
	mostEdges = 1 << 12
	// mostKeys is how many limits and baselines have their edges kept.
	mostKeys = 1 << 10
	// nearEdge is the relative distance from an edge at which rounding could
	// matter: there the test itself decides.
	nearEdge = 1e-9
	// asked stands for an edge that was asked for once: finding it takes as
	// long as a hundred tests, and many a count never comes again.
	asked = -1
)

// edgesOf returns the edges for looks judged so, nil where there are none: an
// estimate that each series has for itself is not worth them, and a window of
// unlike trials has no one exposure. It looks in held first.
func (ix *indicator) edgesOf(held **edges, u *usual, d direction, o *opportunity) *edges {
	if o.trials != nil {
		return nil
	}
	key := edgeKey{u.base, u.limit[d], d}
	if x := *held; x != nil && x.key == key {
		return x
	}
	b := u.base
	if b.Kind == config.Trailing || b.Kind == config.Peers || b.Kind == config.Reference && b.Spread > 1 || key.limit > 0.5 {
		return nil
	}
	x := ix.edges[key]
	if x == nil {
		x = &edges{key: key, u: *u}
		if ix.edges == nil || len(ix.edges) >= mostKeys {
			ix.edges = map[edgeKey]*edges{}
		}
		ix.edges[key] = x
	}
	*held = x
	return x
}

// learn finds the edge of the count, if few events make it so.
func (x *edges) learn(t *tally) {
	const few = 64
	if x == nil || t.events >= few {
		return
	}
	for int64(len(x.at)) <= t.events {
		x.at = append(x.at, math.NaN())
	}
	if edge := x.at[t.events]; math.IsNaN(edge) || edge == asked {
		x.at[t.events] = x.find(t.events, float64(t.exposure.Lo)/pow10[x.u.cfg.GrainDigits])
		x.setSure(t.events, x.at[t.events])
	}
}

// signals says whether so many events signal, and true if that is sure.
func (x *edges) signals(o *opportunity, events int64) (lit, sure bool) {
	if x == nil || events >= mostEdges {
		return false, false
	}
	for int64(len(x.at)) <= events {
		x.at = append(x.at, math.NaN())
	}
	edge := x.at[events]
	switch {
	case math.IsNaN(edge):
		x.at[events] = asked
		return false, false
	case edge == asked:
		edge = x.find(events, o.weighted)
		x.at[events] = edge
		x.setSure(events, edge)
	}
	room := nearEdge * edge
	switch {
	case math.IsInf(edge, 1):
		return x.key.d == upper, x.key.d == lower
	case math.Abs(o.weighted-edge) <= room:
		return false, false
	case x.key.d == upper:
		return o.weighted < edge, true
	}
	return o.weighted > edge, true
}

// find brackets the edge around an exposure, and halves the bracket until it is
// narrower than what is near; 0 where every exposure is past it, infinite where
// none is.
func (x *edges) find(events int64, near float64) float64 {
	few, many := near, near // too little to be past the edge, enough
	for x.past(events, few) {
		if few /= 2; few < 1e-15 {
			return 0
		}
	}
	for !x.past(events, many) {
		if many *= 2; many > 1e12 {
			return math.Inf(1)
		}
	}
	for many-few > nearEdge/8*many {
		if mid := few + (many-few)/2; x.past(events, mid) {
			many = mid
		} else {
			few = mid
		}
	}
	return few
}

// past reports whether the exposure lies past the edge of the count.
func (x *edges) past(events int64, exposure float64) bool {
	p := newLaw(&x.u, x.key.d, &opportunity{exposure: exposure, weighted: exposure})
	if x.key.d == upper {
		return !exact.AtMost(p.Upper(events), x.key.limit)
	}
	return exact.AtMost(p.Lower(events), x.key.limit)
}
