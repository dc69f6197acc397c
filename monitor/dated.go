package monitor

import (
	"slices"

	"tailbell/config"
)

// fact is an act on series as it is kept: what people said holds from a date
// on, or for a span.
type fact struct {
	Kind     ActKind    `json:"kind"`
	Series   string     `json:"series"` // a pattern
	What     ChangeKind `json:"what,omitempty"`
	Into     string     `json:"into,omitempty"`
	Side     Side       `json:"side,omitempty"`
	Straddle bool       `json:"straddle,omitempty"`
	From     Instant    `json:"from"`
	Until    Instant    `json:"until,omitempty"`
	// Taken is the partition's clock when it was taken.
	Taken Instant `json:"taken"`
	By    string  `json:"by"`
	Why   string  `json:"why,omitempty"`
}

func (f *fact) matches(series string) bool { return config.NewPattern(f.Series).Match(series) }

// slots is a span of slots, [from, to).
type slots struct{ from, to int64 }

type spans []slots

func (l spans) hold(slot int64) bool {
	return slices.ContainsFunc(l, func(x slots) bool { return x.from <= slot && slot < x.to })
}

func (l spans) touch(from, to int64) bool {
	return slices.ContainsFunc(l, func(x slots) bool { return x.from < to && from < x.to })
}

// dates are the facts as they hold for one series; nil where there are none.
type dates struct {
	// cuts are the slots before which a window that ends later does not reach.
	cuts []cut
	// outs are out of service; signed are signed off, events and exposure.
	outs   spans
	signed [2]spans
	// turns are openings and closings, in order.
	turns []turn
}

// cut is where counts begin again, for the looks that fall due after a moment.
type cut struct {
	slot  int64
	after Instant
}

// turn is the slot from which on a series is open, or closed.
type turn struct {
	slot int64
	open bool
	// heir says that it opens in the place of others, whose counts it has.
	heir bool
}

// turns reports whether the fact opens or closes the series that it matches.
func (f *fact) turns() bool {
	switch f.What {
	case Opening, Closing, Renamed, Merged:
		return true
	case CaseDefinition, Method:
	}
	return false
}

// datesOf returns how the facts hold for a series of the indicator.
func (e *Engine) datesOf(ix *indicator, name string) *dates {
	var d *dates
	for i := range e.facts {
		f := &e.facts[i]
		if f.Taken >= e.gathered || f.Taken > e.clock {
			continue // sums are being looked at as of before
		}
		heir := f.Into != "" && f.Into == name
		if !heir && !f.matches(name) {
			continue
		}
		if d == nil {
			d = &dates{}
		}
		if heir {
			d.turns = append(d.turns, turn{slot: ix.firstFrom(f.From), open: true, heir: true})
			continue
		}
		d.add(ix, f)
	}
	if d != nil {
		slices.SortStableFunc(d.turns, func(a, b turn) int { return int(a.slot - b.slot) })
	}
	return d
}

func (d *dates) add(ix *indicator, f *fact) {
	switch f.Kind {
	case Reset:
		d.cuts = append(d.cuts, cut{ix.firstFrom(f.From), f.Taken})
	case Change:
		switch {
		case f.turns():
			d.turns = append(d.turns, turn{slot: ix.firstFrom(f.From), open: f.What == Opening})
		case !f.Straddle:
			d.cuts = append(d.cuts, cut{ix.firstFrom(f.From), Beginning})
		}
	case OutOfService:
		if f.Until > f.From {
			d.outs = append(d.outs, ix.touched(f.From, f.Until))
		}
	case SignOff:
		whole := slots{ix.firstFrom(f.From), ix.cal.Slot(f.Until)}
		if f.Side != ExposureSide {
			d.signed[0] = append(d.signed[0], whole)
		}
		if f.Side != EventsSide {
			d.signed[1] = append(d.signed[1], whole)
		}
	case Acknowledge, Close, Note, Mark, Shelve, Unshelve, BackInService:
	}
}

// firstFrom is the first slot that begins at the moment or after it.
func (ix *indicator) firstFrom(at Instant) int64 {
	slot := ix.cal.Slot(at)
	if ix.cal.Start(slot) < at {
		slot++
	}
	return slot
}

// touched are all slots that the span has a part in.
func (ix *indicator) touched(from, until Instant) slots {
	return slots{ix.cal.Slot(from), ix.cal.Slot(until-1) + 1}
}

// spanFrom is the slot at which a window of so many slots begins that ends at
// the boundary: it does not reach over a reset, nor over a change.
func (ix *indicator) spanFrom(s *series, boundary int64, length int) int64 {
	from := boundary - int64(length)
	if s.dates == nil {
		return from
	}
	for _, c := range s.dates.cuts {
		if from < c.slot && c.slot < boundary && (c.after == Beginning || ix.due(boundary) > c.after) {
			from = c.slot
		}
	}
	return from
}

// begin is the slot before which no window that ends at the boundary reaches.
func (s *series) begin(boundary int64) int64 {
	begin := s.birth
	if s.dates != nil {
		for _, t := range s.dates.turns {
			if t.open && !t.heir && t.slot < boundary {
				begin = max(begin, t.slot)
			}
		}
	}
	return begin
}

// isOpen reports whether the dates let the series count in the slot.
func (d *dates) isOpen(slot int64) bool {
	if d == nil || len(d.turns) == 0 {
		return true
	}
	open := !d.turns[0].open
	for _, t := range d.turns {
		if t.slot <= slot {
			open = t.open
		}
	}
	return open
}

func (d *dates) isOut(slot int64) bool { return d != nil && d.outs.hold(slot) }

// inForce reports whether the series is counted in sums of the slot.
func (s *series) inForce(slot int64) bool {
	return s.birth <= slot && s.dates.isOpen(slot) && !s.dates.isOut(slot)
}

// standing says whether the series is looked at when the slot has ended: made if
// it is.
func (s *series) standing(slot int64) status {
	if s.sum != nil {
		if _, any := s.cells.find(slot); !any && s.birth <= slot {
			return s.sum.standing(slot)
		}
	}
	switch {
	case !s.dates.isOpen(slot):
		return closed
	case s.dates.isOut(slot):
		return idle
	}
	return made
}

// standing says why a sum has no slot: it is closed with all its members, or
// some are out of service.
func (r *rollup) standing(slot int64) status {
	for _, m := range r.members {
		if m.birth <= slot && m.dates.isOpen(slot) {
			return idle
		}
	}
	return closed
}

// isSigned reports whether all slots in [from, to) are signed off, on each side
// that is reported.
func (ix *indicator) isSigned(s *series, from, to int64) bool {
	if s.sum != nil {
		for _, m := range s.sum.members {
			for slot := max(from, m.birth); slot < to; slot++ {
				if m.inForce(slot) && !ix.isSigned(m, slot, slot+1) {
					return false
				}
			}
		}
		return true
	}
	if s.dates == nil {
		return false
	}
	for slot := from; slot < to; slot++ {
		exposure := ix.cfg.Exposure == config.Clock || s.dates.signed[1].hold(slot)
		if !s.dates.isOut(slot) && (!s.dates.signed[0].hold(slot) || !exposure) {
			return false
		}
	}
	return true
}

// revise notes that a slot that was signed off changes, and reports whether it
// was.
func (s *series) revise(c *cell, hasEvents, hasExposure bool) bool {
	d := s.dates
	if d != nil && (hasEvents && d.signed[0].hold(c.slot) || hasExposure && d.signed[1].hold(c.slot)) {
		c.revised = true
		return true
	}
	return false
}

// tallyParts sums the slots in [from, to) that were not out of service: those
// that were lack nothing.
func (ix *indicator) tallyParts(s *series, from, to int64) tally {
	var t tally
	begin := from
	for slot := from; slot <= to; slot++ {
		if slot < to && !s.dates.isOut(slot) {
			continue
		}
		if begin < slot {
			part := ix.tallyAll(s, begin, slot)
			t.events += part.events
			t.late += part.late
			t.exposure = t.exposure.add(part.exposure)
			t.known += part.known
			t.provisional += part.provisional
			t.revised += part.revised
		}
		if slot < to {
			t.known++
		}
		begin = slot + 1
	}
	return t
}

func (t *tally) countRevised(c *cell) {
	if c.revised {
		t.revised++
	}
}
