package monitor

import "tailbell/monitor/life"

// lookAll makes the looks of the indicator that fall due at the boundary.
func (e *Engine) lookAll(ix *indicator, boundary int64) {
	due := ix.nextDue
	e.bring(ix, boundary)
	ix.pass(boundary)
	e.lookEach(ix, boundary, due)
	switch {
	case e.alone(ix):
		e.lookGathered(ix.gathering.sums, boundary)
	case ix.gathering != nil && ix.gathering.inbound != nil:
		e.gatherReady(ix.gathering)
	}
}

// lookEach makes the looks at each series of the indicator.
func (e *Engine) lookEach(ix *indicator, boundary int64, due Instant) {
	ep := ix.epochAt(boundary)
	e.fillSums(ix, boundary)
	if ix.counts(boundary) {
		e.inForceAt(ix, boundary)
	}
	e.refresh(ix, ep, boundary)
	e.allot(ix, ep, boundary)
	e.countAt(ix, ep, boundary)
	e.beginVisits(ix, ep, boundary)
	e.visits(ix, ix.resters.visit, func(s *series) {
		if s.birth >= boundary {
			return
		}
		if s.standing(boundary-1) == closed {
			e.shutDown(s, boundary, due)
		} else if !e.quick(s, ep, boundary, due) {
			e.lookAt(s, ep, boundary, due)
		}
		e.trim(s)
		e.rest(s, ep, boundary)
	})
	if ix.retiresAt(boundary) {
		e.retire(ix, due)
	}
}

// lookAt makes the looks of one series that fall due at the boundary.
func (e *Engine) lookAt(s *series, ep *epoch, boundary int64, due Instant) {
	ix := s.indicator
	looks := e.looks[:0]
	for i := range ep.windows {
		p := &ep.windows[i]
		if !ep.cfg.SlotLooks || !ix.looksAt(p.Window, boundary) {
			continue
		}
		l := ix.look(s, ep, p.place, boundary, due)
		e.note(s, &l, boundary)
		if e.onLook != nil && l.status != filling {
			e.onLook(ix.view(s, ep, &l))
		}
		if l.status == made {
			if e.known != nil {
				e.chance(s, ep, &l)
			}
			looks = append(looks, l)
		}
	}
	e.looks = looks
	stood := e.standAt(s, ep, boundary)
	if len(looks) == 0 && !stood {
		return
	}
	if s.quietAfter(looks) {
		return
	}
	for _, d := range bothTails { // a tail that is watched no longer may still have to return
		if d == upper || len(looks) > 0 {
			e.decide(s, d, looks, boundary, due)
		}
	}
}

// quietAfter reports whether there is nothing to decide: none of the looks
// signals, and no alert waits for that.
func (s *series) quietAfter(looks []look) bool {
	for d := range s.tails {
		if t := &s.tails[d]; t.current != nil || t.disarmed {
			return false
		}
	}
	for i := range looks {
		if looks[i].lit != [2]bool{} {
			return false
		}
	}
	return true
}

// note keeps what a look has come to: made, or withheld and why.
func (e *Engine) note(s *series, l *look, boundary int64) {
	ws := &s.windows[l.window]
	e.watch(s, l)
	switch l.status {
	case filling:
		e.account.Filling++
		return
	case made:
		e.account.Looks++
		if ws.withheld != made {
			ws.withheld = made
			e.touch(s)
		}
		ws.made, ws.hasMade = boundary, true
		if s.dates != nil || s.sum != nil {
			e.touch(s) // what is not stored does not follow from its birth
		}
	case closed:
	case missing, overfull, unexposed, unbased, idle:
		e.account.WithheldLooks++
		if l.status == idle {
			e.account.OutOfService++
		}
		if ws.withheld != l.status {
			if ws.withheld == made {
				ws.withheldSince = boundary
			}
			ws.withheld = l.status
			e.touch(s)
		}
	}
}

// decide opens, worsens or returns the alert of one direction after the looks
// of one boundary.
func (e *Engine) decide(s *series, d direction, looks []look, boundary int64, due Instant) {
	t := &s.tails[d]
	lit := e.litOf(s, d, looks)
	if t.current != nil {
		e.worsen(s, d, lit, due)
	} else if entered := e.withEntry(s, d, lit); len(entered) > 0 && !t.disarmed {
		e.open(s, d, lit, strongest(entered, d), due, false)
	}
	if t.current == nil && !t.disarmed {
		return
	}
	if s.active(d) {
		t.quiet = 0
		e.touch(s)
		return
	}
	t.quiet++
	e.touch(s)
	if int(t.quiet) < s.indicator.epochAt(boundary).cfg.Quiet {
		return
	}
	t.disarmed = false
	if a := t.current; a != nil {
		t.leave(s.indicator.leaving(s, boundary, due))
		e.step(a, life.Step{Kind: life.StepReturned, At: due.Time()})
	}
	t.quiet = 0
}

// litOf notes and returns those of the looks that signal.
func (e *Engine) litOf(s *series, d direction, looks []look) []look {
	var lit []look
	for i := range looks {
		if l := &looks[i]; l.lit[d] {
			lit = append(lit, *l)
			s.tails[d].set(l.asLit(d, nil))
			e.touch(s)
		}
	}
	return lit
}

// withEntry returns those of the looks that may open an alert: for the upper
// tail those that an event entered since the look before.
func (e *Engine) withEntry(s *series, d direction, lit []look) []look {
	if d == lower {
		return lit
	}
	var entered []look
	for i := range lit {
		if s.indicator.entered(s, &lit[i]) > 0 {
			entered = append(entered, lit[i])
		}
	}
	return entered
}

// worsen gives the lit looks to the current alert, with a step if a further
// window signals or log10 p is down by one.
func (e *Engine) worsen(s *series, d direction, lit []look, at Instant) {
	if len(lit) == 0 {
		return
	}
	t := &s.tails[d]
	a := t.current
	further := false
	for i := range lit {
		further = further || a.windows&(1<<lit[i].window) == 0
		t.join(&lit[i], a, d)
	}
	s.extend(a, lit[0].boundary)
	l := strongest(lit, d)
	down := l.log10p[d] <= a.worstLog10P-1
	if !down && !further {
		return
	}
	key := lookKey{l.boundary, l.window}
	evidence := e.evidenceOf(s, d, key, l.occasion)
	if l.log10p[d] < a.worstLog10P {
		a.worst, a.worstAt, a.worstLog10P, a.record.Worst = key, l.occasion, l.log10p[d], evidence
	}
	e.step(a, life.Step{Kind: life.StepWorsened, At: at.Time(), Evidence: &evidence})
}

// strongest returns the look with the smallest p, the earliest of equals.
func strongest(looks []look, d direction) look {
	best := looks[0]
	for _, l := range looks[1:] {
		if l.log10p[d] < best.log10p[d] {
			best = l
		}
	}
	return best
}
