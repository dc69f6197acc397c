package monitor

import "tailbell/config"

// running is what the latest look of a window summed, so that the next one only
// adds the slots that enter and takes off those that leave. It is derived from
// the cells, and forgotten when one of them changes.
type running struct {
	from, to int64
	tally    tally
	ok       bool
}

// running returns what the latest look of the window summed.
func (s *series) running(window int) *running {
	if n := len(s.windows); len(s.runnings) < n {
		s.runnings = append(make([]running, 0, n), s.runnings...)[:n]
	}
	return &s.runnings[window]
}

// windowTally sums the slots [from, to) of a look of the window, from what the
// look before it summed where that is nearer.
func (ix *indicator) windowTally(s *series, window int, from, to int64) tally {
	r := s.running(window)
	if s.exposureFrom() == config.Census || to < r.to && r.ok || s.dates != nil && s.dates.outs.touch(from, to) {
		return ix.tally(s, from, to)
	}
	moved := to - r.to
	if r.ok && from-r.from == moved && r.from >= s.trimmed && 2*moved < to-from {
		in, out := ix.sum(s, r.to, to), ix.sum(s, r.from, from)
		t := &r.tally
		t.known += in.known - out.known
		t.events += in.events - out.events
		t.late += in.late - out.late
		t.provisional += in.provisional - out.provisional
		t.revised += in.revised - out.revised
		t.exposure = t.exposure.add(in.exposure).sub(out.exposure)
	} else {
		r.tally = ix.sum(s, from, to)
	}
	r.from, r.to, r.ok = from, to, true
	return ix.filled(s, r.tally, from, to)
}

// sum sums what the cells in [from, to) hold.
func (ix *indicator) sum(s *series, from, to int64) tally {
	var t tally
	inside, needs := s.cells.between(from, to), s.needs()
	for i := range inside {
		c := &inside[i]
		if needs.paired(c) {
			t.known++
		}
		if c.provisional {
			t.provisional++
		}
		t.countRevised(c)
		t.events += c.events
		t.late += c.late
		t.exposure = t.exposure.add(c.exposure)
	}
	return t
}

// filled adds to the sum of [from, to) what needs no cells.
func (ix *indicator) filled(s *series, t tally, from, to int64) tally {
	if s.sum != nil { // where no member was in force nothing is missing
		t.known += to - from - int64(len(s.cells.between(from, to)))
		return t
	}
	needs := s.needs()
	if !needs.events && !needs.exposure {
		t.known = to - from
	}
	if !needs.exposure {
		t.exposure = ix.clock.between(ix.cal.Start(from), ix.cal.Start(to))
	}
	return t
}

// changed forgets the running sums that hold the slot.
func (s *series) changed(slot int64) {
	for w := range s.runnings {
		if r := &s.runnings[w]; slot < r.to {
			r.ok = false
		}
	}
}
