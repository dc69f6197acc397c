package monitor

import (
	"cmp"
	queue "container/heap"
	"slices"
)

// touches reports whether a change reaches the window that ends at an instant. One
// that has not filled reaches all that came.
func (c *change) touches(w arrivalWindow, at Instant) bool {
	from, full := c.series.indicator.windowFrom(c.series, w, at)
	if !full {
		from = Beginning
	}
	for _, x := range c.instants {
		if from < x && x <= at {
			return true
		}
	}
	return c.exposed && c.begin <= at && from < c.end
}

// bound says which stretch of time a change of exposure, or of where the series
// begins, reaches: [begin, end). What is there of events stands in instants.
func (ix *indicator) bound(c *change) {
	if c.weighed {
		c.exposed, c.begin, c.end = true, ix.cal.Start(c.from), ix.cal.Start(c.to+1).Add(ix.cfg.CensusExpiry)
		if c.to >= ix.looked-1 {
			c.end = Never // up to now, which is further than slots were looked at
		}
	}
	if c.reborn && c.birth != unborn {
		c.exposed, c.begin, c.end = true, ix.cal.Start(c.from), max(c.end, ix.cal.Start(c.birth)+1)
	}
}

// lookAtArrivals makes the looks at arrivals that a change touches, those at new
// events for the first time, and returns the ones that came out differently. An
// instant that the clock has not reached waits for it.
func (e *Engine) lookAtArrivals(c *change) []look {
	s := c.series
	ix := s.indicator
	if s.arrivals == nil || !ix.started {
		return nil
	}
	if c.comes && c.came > e.clock {
		queue.Push(&e.comings, coming{c.came, s})
	}
	ix.bound(c)
	if len(c.instants) == 0 && !c.exposed {
		return nil
	}
	changed := e.goneArrivals(c)
	from, to := Never, Beginning
	if c.exposed {
		from, to = c.begin, c.end
	}
	for _, x := range c.instants {
		from, to = min(from, x), max(to, x)
	}
	to = min(s.reachOf(min(to, e.clock)), e.clock)
	e.drawArriving(s)
	for at, n := range s.arrivals.log.Instants(int64(from), int64(to)) {
		if n.Events > 0 {
			changed = append(changed, e.lookAtInstant(s, Instant(at), c)...)
		}
	}
	return changed
}

// lookAtInstant makes the looks at one arrival that the change touches.
func (e *Engine) lookAtInstant(s *series, at Instant, c *change) []look {
	ix := s.indicator
	if ix.cal.Slot(at)+1 <= ix.frozenAt {
		return nil
	}
	var changed []look
	judging := ix.judging(at)
	ep := ix.epochAt(judging)
	first := c.comes && c.came == at
	for _, w := range ix.spans(ep) {
		if !c.touches(w, at) {
			continue
		}
		l := ix.lookAtArrival(s, w, at, judging, e.clock)
		e.noteArrival(s, ep, &l, first)
		if s.tails[upper].differs(&l, upper) {
			changed = append(changed, l)
		}
	}
	return changed
}

// noteArrival counts a look at an arrival.
func (e *Engine) noteArrival(s *series, ep *epoch, l *look, first bool) {
	switch {
	case !first:
		e.account.Reruns++
		return
	case l.status == filling:
		e.account.Filling++
		return
	case l.status == closed:
		return
	case l.status == made:
		e.account.Looks++
	default:
		e.account.WithheldLooks++
		if l.status == idle {
			e.account.OutOfService++
		}
	}
	e.watch(s, l)
	if e.onLook != nil {
		e.onLook(s.indicator.arrivalView(s, ep, l))
	}
}

// goneArrivals are the looks that signalled at instants at which no event is
// left.
func (e *Engine) goneArrivals(c *change) []look {
	var gone []look
	s := c.series
	for i := range s.tails[upper].lit {
		l := &s.tails[upper].lit[i]
		if l.occasion.arrival && l.boundary > s.indicator.frozenAt && slices.Contains(c.instants, l.occasion.at) && s.arrivals.log.At(int64(l.occasion.at)).Events == 0 {
			gone = append(gone, look{window: l.window, boundary: l.boundary, occasion: l.occasion, status: missing})
		}
	}
	return gone
}

// drawArriving gives a series whose first event has come limits at once, as far
// as what is to be expected of it is known already.
func (e *Engine) drawArriving(s *series) {
	if ix := s.indicator; len(s.limits) == 0 {
		e.draw(s, ix.epochAt(ix.looked), ix.looked)
	}
}

// sortLooks puts looks into the order in which they were to be made.
func sortLooks(looks []look) {
	slices.SortStableFunc(looks, func(a, b look) int {
		return cmp.Or(cmp.Compare(a.boundary, b.boundary), a.occasion.compare(b.occasion), cmp.Compare(a.window, b.window))
	})
}

// stillSignals reports whether any span that ends at the moment when the boundary
// fell due signals, and whether any could be tested.
func (ix *indicator) stillSignals(s *series, boundary int64) (signals, tested bool) {
	at := ix.due(boundary)
	for _, w := range ix.spans(ix.epochAt(boundary)) {
		l := ix.lookAtArrival(s, w, at, boundary, at)
		signals = signals || l.lit[upper]
		tested = tested || l.status == made
	}
	return signals, tested
}

// arriving reports whether a span that ends at or after the moment at which the
// latest boundary fell due signals.
func (s *series) arriving() bool {
	ix := s.indicator
	if s.arrivals == nil || !ix.started {
		return false
	}
	due := ix.due(ix.looked)
	for _, l := range s.tails[upper].lit {
		if l.occasion.arrival && l.occasion.at > due {
			return true
		}
	}
	signals, _ := ix.stillSignals(s, ix.looked)
	return signals
}

// standAt says whether arrival looks have a say in whether the boundary is
// quiet, and keeps why they could not be made where no other looks tell.
func (e *Engine) standAt(s *series, ep *epoch, boundary int64) bool {
	ix := s.indicator
	if s.arrivals == nil || !ep.cfg.ArrivalLooks || s.sum != nil {
		return false
	}
	any := false
	at := ix.due(boundary)
	for _, w := range ix.spans(ep) {
		l := ix.lookAtArrival(s, w, at, boundary, at)
		any = any || l.status == made
		if ws := &s.windows[w.place]; !ep.cfg.SlotLooks && l.status != filling && l.status != closed && ws.withheld != l.status {
			if ws.withheld == made {
				ws.withheldSince = boundary
			}
			ws.withheld = l.status
			e.touch(s)
		}
	}
	return any
}

// leaving is the boundary up to which an alert that returns as one falls due has
// its own span: looks at arrivals were made since the boundary itself.
func (ix *indicator) leaving(s *series, boundary int64, due Instant) int64 {
	if s.arrivals == nil {
		return boundary
	}
	return max(boundary, ix.cal.Slot(due))
}

// coming is an event that lies ahead of the clock.
type coming struct {
	at     Instant
	series *series
}

// comings is a heap of them, the earliest first.
type comings []coming

func (c comings) Len() int      { return len(c) }
func (c comings) Swap(i, j int) { c[i], c[j] = c[j], c[i] }

func (c comings) Less(i, j int) bool {
	return cmp.Or(cmp.Compare(c[i].at, c[j].at), cmp.Compare(c[i].series.number, c[j].series.number)) < 0
}

// Push appends x; it is called by package heap alone.
func (c *comings) Push(x any) {
	if next, ok := x.(coming); ok {
		*c = append(*c, next)
	}
}

// Pop removes the last one; it is called by package heap alone.
func (c *comings) Pop() any {
	old := *c
	last := old[len(old)-1]
	*c = old[:len(old)-1]
	return last
}

// nextComing returns when the next of them is reached, Never if there is none.
func (e *Engine) nextComing() Instant {
	for len(e.comings) > 0 {
		next := e.comings[0]
		if a := next.series.arrivals; a != nil && a.log.At(int64(next.at)).Events > 0 {
			return next.at
		}
		queue.Pop(&e.comings) // it was taken back
	}
	return Never
}

// arrive lets happen what happens between boundaries up to a moment, on the
// clock's way to another: looks at events that were told ahead of the clock, and
// what happens to alerts by itself.
func (e *Engine) arrive(until, to Instant) {
	for at := e.nextComing(); at <= until && at != Never; at = e.nextComing() {
		e.awake(at-1, to)
		s := e.comings[0].series
		for len(e.comings) > 0 && e.comings[0] == (coming{at, s}) {
			queue.Pop(&e.comings)
		}
		e.clock = at
		c := change{series: s}
		c.instants, c.came, c.comes = []Instant{at}, at, true
		if looks := e.lookAtInstant(s, at, &c); len(looks) > 0 {
			e.correct(s, upper, looks)
		}
		e.settleAll()
	}
	e.awake(until, to)
}

// restoreComings finds the events that lie ahead of the clock.
func (e *Engine) restoreComings() {
	for _, s := range e.series {
		if s.arrivals == nil {
			continue
		}
		for at, n := range s.arrivals.log.Instants(int64(e.clock)+1, int64(Never)) {
			if n.Events > 0 {
				queue.Push(&e.comings, coming{Instant(at), s})
			}
		}
	}
}

// firstLimits makes the looks at arrivals of a series again that had no limits
// until now.
func (e *Engine) firstLimits(s *series) {
	ix := s.indicator
	if s.arrivals == nil || len(s.limits) == 0 {
		return
	}
	all := change{series: s}
	all.exposed, all.begin, all.end = true, Beginning, Never
	var changed []look
	for at, n := range s.arrivals.log.Instants(int64(ix.cal.Start(ix.frozenAt)), int64(e.clock)) {
		if n.Events > 0 {
			changed = append(changed, e.lookAtInstant(s, Instant(at), &all)...)
		}
	}
	if len(changed) > 0 {
		e.correct(s, upper, changed)
	}
}
