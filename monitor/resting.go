package monitor

// leaves is the boundary at which a cell of the slot leaves memory, as seen from
// an earlier one.
func (ix *indicator) leaves(slot, boundary int64) int64 {
	keeps := ix.frozen(ix.due(boundary)) + 1 - max(ix.reach, historyOf(ix.cfg)) - boundary
	return slot - keeps + 1
}

// restsOn lets a series go on resting although a slot of it changes, if no look
// has seen that yet, and reports whether it does. The look that is the first to see
// it is visited, unless it is sure already that it and the looks after it do not
// signal.
func (s *series) restsOn(slot int64) bool {
	ix := s.indicator
	if !s.resting || slot < ix.resters.counted {
		return false
	}
	if ix.staysClear(s, slot) {
		s.wakeAt(ix.leaves(s.cells[0].slot, ix.resters.counted))
	} else {
		s.wakeAt(slot + 1)
	}
	return true
}

// staysClear reports whether no look that sees the slot can signal, as far as is
// known now. More events make a lower tail no sharper.
func (ix *indicator) staysClear(s *series, slot int64) bool {
	ep := ix.now()
	cfg, b := ep.cfg, s.base
	if !byClock(cfg) || s.baseOf != cfg || b == nil || !hasEdges(b) {
		return false
	}
	for i := range ep.windows {
		p := &ep.windows[i]
		ws := &s.windows[p.place]
		limit := s.limitsAt(cfg, p.place, slot+1)
		switch {
		case ws.rests == filling || ws.rests == made && (!cfg.Upper || limit[upper] <= 0):
			continue
		case ws.rests != made:
			return false
		}
		from := slot + 1 - int64(p.Slots)
		t := tally{events: s.atMost(p.place, from), exposure: ix.clock.between(ix.cal.Start(from), ix.cal.Start(slot+1))}
		if t.exposure.Hi != 0 || t.exposure.Lo < 4 || t.exposure.Lo >= 1<<52 {
			return false
		}
		t.exposure.Lo -= 2
		if surelyUsual(cfg, b, limit[upper], &t) {
			continue
		}
		if u, ok := ix.judgedBy(s, ep, p.place, slot+1); ok {
			ix.edgesOf(&ws.edges[upper], &u, upper, &opportunity{}).learn(&t)
		}
		if !ws.edges[upper].clear(b, limit[upper], &t) {
			return false
		}
	}
	return true
}

// atMost is a bound of the events from the slot on: those of the latest look, with
// all that came since, or the very sum.
func (s *series) atMost(window int, from int64) (events int64) {
	if window < len(s.runnings) && s.runnings[window].ok {
		r := &s.runnings[window]
		events = r.tally.events
		from = max(from, r.to)
	}
	first, _ := s.cells.find(from)
	for i := range s.cells[first:] {
		events += s.cells[first+i].events
	}
	return events
}
