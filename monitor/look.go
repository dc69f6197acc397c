package monitor

import (
	"math"

	"tailbell/config"
	"tailbell/exact"
)

// status says whether a look was made, and if not, why.
type status uint8

const (
	made      status = iota // the window is known and was tested
	filling                 // the window reaches before the series begins
	missing                 // a count or an exposure in it is missing
	overfull                // more events than trials
	unexposed               // events, but no exposure
	unbased                 // no baseline is valid, or its reference is too small
	idle                    // the series is out of service
	closed                  // the series is closed
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
	case unbased:
		return "no baseline is valid, or its reference holds too few events"
	case idle:
		return "out of service"
	case closed:
		return "closed"
	}
	return "unknown status"
}

// look is one test of one window of one series at one boundary, as the data
// stand.
type look struct {
	window   int
	boundary int64
	occasion occasion
	status   status
	at       Instant // when it was made: its due time, or the clock when re-run
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
	// provisional counts the slots whose exposure was carried forward.
	provisional int64
	// revised counts those that changed after they had been signed off.
	revised int64
}

// tally sums the slots in [from, to).
func (ix *indicator) tally(s *series, from, to int64) tally {
	if s.dates != nil && s.dates.outs.touch(from, to) {
		return ix.tallyParts(s, from, to)
	}
	return ix.tallyAll(s, from, to)
}

func (ix *indicator) tallyAll(s *series, from, to int64) tally {
	if s.exposureFrom() == config.Census {
		return ix.tallyCensus(s, from, to)
	}
	return ix.filled(s, ix.sum(s, from, to), from, to)
}

// tallyCensus sums the slots in [from, to) where levels are carried forward.
func (ix *indicator) tallyCensus(s *series, from, to int64) tally {
	var t tally
	inside := s.cells.between(from, to)
	for i := range inside {
		t.events += inside[i].events
		t.late += inside[i].late
		t.countRevised(&inside[i])
	}
	ix.carry(s, from, to, func(slot int64, q Quantity, provisional bool) {
		t.exposure = t.exposure.add(q)
		if provisional {
			t.provisional++
		}
		if _, known := ix.eventsOf(s, slot); known {
			t.known++
		}
	})
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
			if i, ok := s.cells.find(slot); !ok || !s.needs().paired(&s.cells[i]) {
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

// look tests one window of the series that ends at the boundary, at the moment
// at.
func (ix *indicator) look(s *series, ep *epoch, window int, boundary int64, at Instant) look {
	l := look{window: window, boundary: boundary, at: at}
	from := ix.spanFrom(s, boundary, ix.places[window].Slots)
	if from < max(ep.begin(s, window), s.begin(boundary)) {
		l.status = filling
		return l
	}
	if l.status = s.standing(boundary - 1); l.status != made {
		return l
	}
	l.tally = ix.windowTally(s, window, from, boundary)
	l.status = ix.judge(s, &l.tally, from, boundary)
	if l.status != made || l.exposure.IsZero() {
		return l
	}
	u, ok := ix.judgedBy(s, ep, window, boundary)
	if !ok {
		l.status = unbased
		return l
	}
	o := ix.opportunity(s, &u, &l.tally, from, boundary, at)
	ix.test(s, &l, &u, &o)
	return l
}

// test fills in which tails signal. Where nothing can have been reported yet
// nothing can be tested.
func (ix *indicator) test(s *series, l *look, u *usual, o *opportunity) {
	if o.weighted == 0 {
		return
	}
	held := &s.windows[l.window].edges
	ix.testUpper(&held[upper], l, u, o)
	if u.cfg.Lower && u.limit[lower] > 0 && !farAbove(u, o, l.events) {
		lit, sure := ix.edgesOf(&held[lower], u, lower, o).signals(o, l.events)
		if lit || !sure {
			p := newLaw(u, lower, o)
			if l.lit[lower] = sure || exact.AtMost(p.Lower(l.events), u.limit[lower]); l.lit[lower] {
				l.log10p[lower] = p.LogLower(l.events) / math.Ln10
			}
		}
	}
}

// testUpper is test for the upper tail, with the edges that the look before was
// compared with.
func (ix *indicator) testUpper(held **edges, l *look, u *usual, o *opportunity) {
	if o.weighted == 0 || !u.cfg.Upper || u.limit[upper] <= 0 || l.events == 0 || farBelow(u, o, l.events) {
		return
	}
	lit, sure := ix.edgesOf(held, u, upper, o).signals(o, l.events)
	if lit || !sure {
		p := newLaw(u, upper, o)
		if l.lit[upper] = sure || exact.AtMost(p.Upper(l.events), u.limit[upper]); l.lit[upper] {
			l.log10p[upper] = p.LogUpper(l.events) / math.Ln10
		}
	}
}

// statusAt says whether a look of the window at the boundary can be made.
func (ix *indicator) statusAt(s *series, window int, boundary int64) status {
	ep := ix.epochAt(boundary)
	if st := s.standing(boundary - 1); st != made {
		return st
	}
	from := ix.spanFrom(s, boundary, ix.places[window].Slots)
	t := ix.tally(s, from, boundary)
	st := ix.judge(s, &t, from, boundary)
	if st == made && !t.exposure.IsZero() {
		if _, ok := ix.usualAt(s, ep, boundary); !ok {
			return unbased
		}
	}
	return st
}

// previous returns the latest look of the window before the boundary that can
// be made with the data as they stand, and false if there is none.
func (ix *indicator) previous(s *series, window int, boundary int64) (int64, bool) {
	p := ix.epochAt(boundary).placed(window)
	if p == nil {
		return 0, false
	}
	step := int64(p.Step)
	for b := boundary - step; b >= p.since && b > max(s.birth, ix.floor); b -= step {
		from := ix.spanFrom(s, b, p.Slots)
		if from < max(p.whole, ix.floor) {
			break
		}
		if from < s.begin(b) {
			continue
		}
		if ix.statusAt(s, window, b) == made {
			return b, true
		}
	}
	return 0, false
}

// entered counts the events in the window that no made look before it held.
func (ix *indicator) entered(s *series, l *look) int64 {
	if l.occasion.arrival {
		return l.events // that of its own instant among them
	}
	from := ix.spanFrom(s, l.boundary, ix.places[l.window].Slots)
	if b, ok := ix.previous(s, l.window, l.boundary); ok {
		from = max(from, b)
	}
	t := ix.tally(s, from, l.boundary)
	return t.events
}

// active reports whether the latest made look at slots of any window in force
// signals, or a span that is looked at when events come still does.
func (s *series) active(d direction) bool {
	if d == upper && s.arriving() {
		return true
	}
	t := &s.tails[d]
	for _, p := range s.indicator.now().windows {
		if ws := &s.windows[p.place]; ws.hasMade {
			if _, lit := t.litAt(ws.made, p.place); lit {
				return true
			}
		}
	}
	return false
}
