package monitor

import (
	"slices"

	"tailbell/monitor/life"
)

// markedSpan is what an alert covered that a person marked real: from the
// beginning of its opening window to its last boundary. Trailing baselines
// leave it out. Spans are left out whole, events and exposure alike, because a
// person said so; never simply because something rang, which would bias the
// usual rate down.
type markedSpan struct {
	alert    string
	from, to int64
}

// mark notes what a person says the alert was.
func (s *series) mark(a *alert, mark life.Mark) {
	s.marked = slices.DeleteFunc(s.marked, func(m markedSpan) bool { return m.alert == a.record.ID })
	if mark != life.MarkReal {
		return
	}
	ix := s.indicator
	w := &ix.places[a.opening.window]
	from := ix.spanFrom(s, a.first, w.Slots)
	if w.Trials > 0 {
		from = ix.cal.Slot(InstantOf(a.record.Opening.From))
	}
	s.marked = append(s.marked, markedSpan{alert: a.record.ID, from: from, to: min(a.last, ix.looked)})
}

// extend lets the marked span of an alert that still signals reach to the
// boundary.
func (s *series) extend(a *alert, boundary int64) {
	for i := range s.marked {
		if m := &s.marked[i]; m.alert == a.record.ID {
			m.to = boundary
		}
	}
}
