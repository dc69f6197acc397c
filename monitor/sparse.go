package monitor

import "tailbell/config"

// byClock reports whether windows of the stanza are sums of the events that there
// were, over exposure by the clock: then a slot without a cell is as well known
// as any, and most have none.
func byClock(cfg *config.Indicator) bool {
	return cfg.Exposure == config.Clock && cfg.Events == config.Each && cfg.Measure == config.Rate && cfg.SlotLooks && !cfg.ArrivalLooks
}

// quickSparse is quick for exposure by the clock: each window is one slot on from
// the look before it, and surely does not signal.
func (e *Engine) quickSparse(s *series, ep *epoch, boundary int64, due Instant) bool {
	if s.sum != nil || e.known != nil {
		return false
	}
	in := s.cells.held(boundary - 1)
	for i := range ep.windows {
		if p := &ep.windows[i]; p.Step != 1 || !s.quickSpan(ep.cfg, p, in, boundary) {
			return false
		}
	}
	for i := range ep.windows {
		w := ep.windows[i].place
		s.windows[w].made = boundary
		e.account.Looks++
		if e.passing {
			e.watched(s, w, due)
		}
	}
	return true
}

// quickSpan moves the window's sum on, and reports whether its look is made and
// surely does not signal.
func (s *series) quickSpan(cfg *config.Indicator, p *placed, in *cell, boundary int64) bool {
	ix, w := s.indicator, p.place
	ws, r := &s.windows[w], s.running(w)
	if ws.withheld != made || !ws.hasMade || !r.ok && ws.made != boundary-1 {
		return false
	}
	if !r.ok {
		from := boundary - int64(p.Slots)
		*r = running{from, boundary, ix.sum(s, from, boundary), true}
	} else if r.to == boundary-1 {
		if r.from < s.trimmed {
			return false
		}
		if in != nil {
			r.count(in, 1)
		}
		if out := s.cells.held(r.from); out != nil {
			r.count(out, -1)
		}
		r.from, r.to = r.from+1, r.to+1
	}
	if r.to != boundary {
		return false
	}
	limit := s.limitsAt(cfg, w, boundary)
	tested := [2]bool{upper: cfg.Upper && r.tally.events > 0 && limit[upper] > 0, lower: cfg.Lower && limit[lower] > 0}
	if !tested[upper] && !tested[lower] {
		return true
	}
	t := r.tally
	t.exposure = ix.clock.between(ix.cal.Start(r.from), ix.cal.Start(r.to))
	if t.exposure.Hi != 0 || t.exposure.Lo == 0 || t.exposure.Lo >= 1<<52 {
		return false
	}
	tested[upper] = tested[upper] && !surelyUsual(cfg, s.base, limit[upper], &t)
	for _, d := range bothTails {
		if tested[d] && !ws.edges[d].clear(s.base, limit[d], &t) {
			return false
		}
	}
	return true
}

// surelyUsual reports whether the count is at or under the median of a known rate:
// then it has an upper p of a half at least.
func surelyUsual(cfg *config.Indicator, b *config.Baseline, limit float64, t *tally) bool {
	if b.Kind != config.Known || b.Spread > 1 || b.Margin < 1 || limit >= 0.5 {
		return false
	}
	weighted := float64(t.exposure.Lo) / pow10[cfg.GrainDigits]
	return float64(t.events) <= b.Rate*weighted-1
}

// count adds a cell to the sum (sign 1) or takes it off (-1); exposure by the
// clock has no part in it.
func (r *running) count(c *cell, sign int64) {
	r.tally.known += sign
	r.tally.events += sign * c.events
	r.tally.late += sign * c.late
	if c.revised {
		r.tally.revised += sign
	}
}

// held returns the cell of the slot, nil if there is none.
func (cs cells) held(slot int64) *cell {
	if i, ok := cs.find(slot); ok {
		return &cs[i]
	}
	return nil
}
