package monitor

import (
	"math"

	"tailbell/config"
)

// status says whether a look was made, and if not, why.
type status uint8

const (
	made      status = iota // the window is known and was tested
	filling                 // the window reaches before the series begins
	missing                 // a count or an exposure in it is missing
	overfull                // more events than trials
	unexposed               // events, but no exposure
)

// String returns the status as shown to people.
func (s status) String() string {
	switch s {
	case made:
		return "made"
	case filling:
		return "filling"
	case missing:
		return "a count or an exposure is missing"
	case overfull:
		return "more events than trials"
	case unexposed:
		return "events without exposure"
	}
	return "unknown status"
}

// look is one test of one window of one series at one boundary, as the data
// stand.
type look struct {
	window   int
	boundary int64
	status   status
	tally
	lit    [2]bool
	log10p [2]float64
}

// tally is the sum over a span of slots.
type tally struct {
	events   int64
	late     int64
	exposure Quantity
	known    int64 // slots with both sides known
}

// tally sums the slots in [from, to).
func (ix *indicator) tally(s *series, from, to int64) tally {
	var t tally
	inside := s.cells.between(from, to)
	for i := range inside {
		c := &inside[i]
		if ix.needs.paired(c) {
			t.known++
		}
		t.events += c.events
		t.late += c.late
		t.exposure = t.exposure.add(c.exposure)
	}
	if !ix.needs.events && !ix.needs.exposure {
		t.known = to - from
	}
	if !ix.needs.exposure {
		t.exposure = ix.clock.between(ix.cal.Start(from), ix.cal.Start(to))
	}
	return t
}

// empty counts the days in [from, to) that a zone skipped, as far as they are
// not known: such a slot has no length and lacks nothing.
func (ix *indicator) empty(s *series, from, to int64) int64 {
	// A skipped day is the only thing that makes a span shorter by half a day.
	if ix.cal.every.Unit != config.Day || int64(ix.cal.Start(to)-ix.cal.Start(from)) > (to-from)*day-day/2 {
		return 0
	}
	var n int64
	for slot := from; slot < to; slot++ {
		if ix.cal.Start(slot) == ix.cal.Start(slot+1) {
			if i, ok := s.cells.find(slot); !ok || !ix.needs.paired(&s.cells[i]) {
				n++
			}
		}
	}
	return n
}

// judge says whether the span's sums can be tested.
func (ix *indicator) judge(s *series, t *tally, from, to int64) status {
	if t.known < to-from && t.known < to-from-ix.empty(s, from, to) {
		return missing
	}
	if ix.cfg.Measure == config.Proportion {
		if trials, ok := t.exposure.Int64(); !ok || t.events > trials {
			return overfull
		}
	}
	if t.events > 0 && t.exposure.IsZero() {
		return unexposed
	}
	return made
}

// look tests one window of the series that ends at the boundary.
func (ix *indicator) look(s *series, ep *epoch, window int, boundary int64) look {
	l := look{window: window, boundary: boundary}
	from := boundary - int64(ep.cfg.Windows[window].Slots)
	if from < s.birth {
		l.status = filling
		return l
	}
	l.tally = ix.tally(s, from, boundary)
	l.status = ix.judge(s, &l.tally, from, boundary)
	if l.status == made && !l.exposure.IsZero() {
		ix.test(s, ep, &l)
	}
	return l
}

// test fills in which tails signal.
func (ix *indicator) test(s *series, ep *epoch, l *look) {
	b := s.baseline(ep.cfg)
	u := ep.cfg.Upper && l.events > 0
	w := ep.cfg.Lower
	exposure := l.exposure.Float(ep.cfg.GrainDigits)
	if u && !farBelow(ep.cfg, b, l.events, exposure) {
		p := newLaw(ep.cfg, b, upper, exposure)
		if p.Upper(l.events) <= ep.cfg.PLimit {
			l.lit[upper] = true
			l.log10p[upper] = p.LogUpper(l.events) / math.Ln10
		}
	}
	if w && !farAbove(ep.cfg, b, l.events, exposure) {
		p := newLaw(ep.cfg, b, lower, exposure)
		if p.Lower(l.events) <= ep.cfg.PLimit {
			l.lit[lower] = true
			l.log10p[lower] = p.LogLower(l.events) / math.Ln10
		}
	}
}

// previous returns the latest look of the window before the boundary that can
// be made with the data as they stand, and false if there is none.
func (ix *indicator) previous(s *series, window int, boundary int64) (int64, bool) {
	w := &ix.cfg.Windows[window]
	length, step := int64(w.Slots), int64(w.Step)
	for b := boundary - step; b-length >= max(s.birth, ix.floor); b -= step {
		t := ix.tally(s, b-length, b)
		if ix.judge(s, &t, b-length, b) == made {
			return b, true
		}
	}
	return 0, false
}

// entered counts the events in the window that no made look before it held.
func (ix *indicator) entered(s *series, l *look) int64 {
	from := l.boundary - int64(ix.cfg.Windows[l.window].Slots)
	if b, ok := ix.previous(s, l.window, l.boundary); ok {
		from = max(from, b)
	}
	t := ix.tally(s, from, l.boundary)
	return t.events
}

// active reports whether the latest made look of any window signals.
func (s *series) active(d direction) bool {
	t := &s.tails[d]
	for w := range s.windows {
		if ws := &s.windows[w]; ws.hasMade {
			if _, lit := t.litAt(ws.made, w); lit {
				return true
			}
		}
	}
	return false
}

// baseline returns the baseline that serves the series.
func (s *series) baseline(cfg *config.Indicator) *config.Baseline {
	if s.baseOf != cfg {
		s.base, s.baseOf = cfg.BaselineFor(s.name), cfg
	}
	return s.base
}
