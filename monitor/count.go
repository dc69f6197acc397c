package monitor

import (
	"math/big"
)

// counts reports whether a day's counts are taken at the boundary.
func (ix *indicator) counts(boundary int64) bool {
	return ix.counting != nil && ix.dayBegins(boundary) == boundary
}

// beginCounts tells what there is when the counting of an indicator begins, or
// when boundaries were skipped since there was nothing to look at: as of the first
// boundary of the present day.
func (e *Engine) beginCounts(ix *indicator) {
	if ix.counting == nil {
		return
	}
	l, sums := e.ownLane(ix)
	boundary := ix.dayBegins(ix.looked)
	switch {
	case !l.Begun:
		e.countAll(ix, ix.epochAt(boundary), boundary)
	case boundary > l.Through:
		e.tellCount(ix.counting, &Summary{after: l.Through, through: boundary, count: &count{Nothing: true, Sums: sums}})
	}
	e.inForce(ix)
	e.reheld()
}

// forgetNothing notes that what was told has been handed over.
func (e *Engine) forgetNothing() {
	for _, k := range e.countings {
		k.nothing = [2]*Summary{}
	}
}

// countAt counts the series of the indicator at the first boundary of a day, when
// its looks fall due.
func (e *Engine) countAt(ix *indicator, ep *epoch, boundary int64) {
	if ix.counts(boundary) {
		e.countAll(ix, ep, boundary)
		e.reheld()
	}
}

func (e *Engine) countAll(ix *indicator, ep *epoch, boundary int64) {
	l, sums := e.ownLane(ix)
	s := &Summary{begins: !l.Begun, after: never, through: boundary}
	if l.Begun {
		s.after = l.Through
	}
	if l.Begun && boundary <= l.Through {
		return // a start in between
	}
	x := &count{Sums: sums, Predicted: new(big.Int)}
	alike := map[*solution]int64{}
	for _, m := range ix.series {
		if m.birth < boundary {
			x.Series++
			if m.own == nil || m.own.since == maxBoundary {
				m.attended().since = boundary
				e.touch(m)
			}
		}
		if len(m.limits) > 0 && m.limits[0].from <= boundary {
			x.Limited++
			alike[m.limitsOf(boundary).solution]++
		}
	}
	for l, n := range alike { // in any order: the sums are exact
		x.Predicted.Add(x.Predicted, new(big.Int).Mul(fixed(l.here), big.NewInt(n)))
	}
	if !sums {
		x.Pools = e.countPools(ix, ep, boundary)
	}
	x.Nothing = len(ix.series) == 0
	s.count = x
	e.tellCount(ix.counting, s)
}

// isCounted reports whether the series is among those counted that are in force.
func (ix *indicator) isCounted(s *series) bool {
	return s.own != nil && s.own.since <= ix.agreed.Through
}
