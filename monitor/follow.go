package monitor

import "math"

// follow brings the stanza that has come into force for the indicator into force
// for its gathered sums: at once, or if they are behind, when they have come to it.
func (e *Engine) follow(ix *indicator) {
	g := ix.gathering
	if g == nil || g.sums == nil {
		return
	}
	up := g.sums
	ep := ix.epochs[len(ix.epochs)-1]
	if n := len(up.epochs); n > 0 && up.epochs[n-1].from >= ep.from {
		up.epochs = up.epochs[:n-1]
	}
	up.index, up.places = ix.index, ix.places
	if len(up.epochs) == 0 || up.started && ep.from <= up.looked+1 {
		e.comeTo(up, &ep)
	}
	up.epochs = append(up.epochs, ep)
	up.measure()
	if up.started {
		up.pass(up.looked)
	}
}

// comeTo lets gathered sums look by a version of the stanza.
func (e *Engine) comeTo(up *indicator, ep *epoch) {
	e.vacate(up, ep.windows)
	up.cfg, up.since = ep.cfg, ep.from
	up.edges, up.drawn, up.total = nil, drawn{epoch: math.MinInt64}, total{}
}

// keepUp lets gathered sums that were behind look by the version of the stanza that
// they have come to.
func (e *Engine) keepUp(up *indicator) {
	if !up.started {
		return
	}
	if ep := up.epochAt(up.looked + 1); ep.from > up.since {
		e.comeTo(up, ep)
		up.pass(up.looked)
	}
}
