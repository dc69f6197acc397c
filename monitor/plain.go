package monitor

// plainRow counts an observation if it is the usual one of a history: events and
// exposure of a known series, without an id, in the slot after those that are
// there. It reports whether it did; if not, the clock may have moved on to when
// the observation became known, and nothing else happened.
func (e *Engine) plainRow(m *Message, o *Observation) bool {
	if !e.history || !m.HasTime || o.ID != "" || o.Retracted || o.Instant || !o.HasEvents || !o.HasExposure || e.long {
		return false
	}
	s := e.named(o.Series)
	if s == nil || s.dates != nil || !s.indicator.plain(s.indicator.cfg) || s.indicator.cfg.Allowance != nil && len(s.limits) == 0 {
		return false
	}
	ix, clock := s.indicator, max(e.clock, m.Time)
	slot := ix.cal.Slot(o.Start)
	end := ix.cal.Start(slot + 1)
	exposure, reason := quantityOf(o.Exposure, ix.cfg.GrainDigits)
	if reason != "" || o.End <= o.Start || o.End > end || o.Events > maxEvents ||
		end < clock.Add(-ix.cfg.Horizon) || o.End > clock.Add(ix.cfg.Ahead) {
		return false
	}
	e.advance(clock)
	n := len(s.cells)
	if slot < ix.looked || slot < s.birth || n > 0 && slot <= s.cells[n-1].slot {
		return false
	}
	s.makeRoom()
	s.cells = append(s.cells, cell{slot: slot, events: o.Events, exposure: exposure, saysEvents: 1, saysExposure: 1, items: 1})
	s.seen = e.clock
	e.heard(s)
	e.account.Counted++
	e.touchSlot(s, slot)
	e.inform(s, slot, slot, false, "")
	return true
}

// usualRow counts an observation if it is the usual one of a feed: events and
// exposure of a known series, without an id, within one slot that nothing has
// looked at yet, of which nobody is told and nothing is said beside it. It reports
// whether it did; if not, nothing happened.
func (e *Engine) usualRow(o *Observation) bool {
	if o.ID != "" || o.Retracted || o.Instant || o.Reading || !o.HasEvents || !o.HasExposure || e.long || e.clock == Beginning {
		return false
	}
	s := e.named(o.Series)
	if s == nil || !s.standsAlone() {
		return false
	}
	ix := s.indicator
	slot := ix.cal.Slot(o.Start)
	if slot < ix.looked || slot < s.birth {
		return false
	}
	end := ix.cal.Start(slot + 1)
	exposure, reason := quantityOf(o.Exposure, ix.cfg.GrainDigits)
	if reason != "" || o.End <= o.Start || o.End > end || o.Events > maxEvents ||
		end < e.clock.Add(-ix.cfg.Horizon) || o.End > e.clock.Add(ix.cfg.Ahead) {
		return false
	}
	c := s.at(slot)
	if c.events > maxEvents-o.Events {
		return false
	}
	c.items++
	c.saysEvents++
	c.saysExposure++
	c.events += o.Events
	c.exposure = c.exposure.add(exposure)
	s.seen = e.clock
	e.heard(s)
	e.account.Counted++
	e.touchSlot(s, slot)
	return true
}

// standsAlone reports whether what is reported of a series changes nothing but its
// own cells: it has begun, no sum, heir or other partition counts it too, no act
// holds for it, and looks are made at its slots alone, by limits that it has.
func (s *series) standsAlone() bool {
	cfg := s.indicator.cfg
	return s.indicator.plain(cfg) && cfg.SlotLooks && !cfg.ArrivalLooks && cfg.Since.IsZero() && (cfg.Allowance == nil || len(s.limits) > 0) &&
		s.birth != unborn && !s.retired && !s.mirror && s.sum == nil && s.sums == nil && s.news == nil &&
		s.heir == nil && s.heirs == nil && s.dates == nil && s.arrivals == nil && s.totals == nil
}
