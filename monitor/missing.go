package monitor

import (
	"fmt"
	"slices"
	"strings"
)

// mostLacking is how many members of a sum a condition names.
const mostLacking = 3

// lacking says what is missing in the first slot without which the window could
// not be looked at, and of which members of a sum; "" if all has come since, so
// that the next look will be made.
func (ix *indicator) lacking(s *series, w *placed) string {
	ws := &s.windows[w.place]
	length, step := int64(w.Slots), int64(w.Step)
	in := func(from, to int64) string {
		for slot := max(from, s.birth, ix.kept); slot < to; slot++ { // of what has left memory nothing is known any more
			if what := ix.lackedIn(s, slot); what != "" {
				return what
			}
		}
		return ""
	}
	// The window before that one was looked at most often, so that it is in the
	// step; else that one had just filled.
	end := ws.withheldSince
	if what := in(end-step, end); what != "" && in(end-step-1, end-step) == "" {
		return what
	}
	if what := in(end-length, end); what != "" {
		return what
	}
	return in(ix.looked-length, ix.looked)
}

// lackedIn says what of the slot is missing; "" for nothing.
func (ix *indicator) lackedIn(s *series, slot int64) string {
	if ix.cal.Start(slot) == ix.cal.Start(slot+1) {
		return "" // a day that the zone skipped
	}
	of := []*series{s}
	summed := s.sum != nil || s.inherited(slot)
	if summed {
		of = s.parts()
	}
	var names []string
	var all sides
	for _, m := range of {
		if !m.inForce(slot) {
			continue
		}
		side := ix.sidesLacking(m, slot)
		if side == (sides{}) {
			continue
		}
		all.events, all.exposure = all.events || side.events, all.exposure || side.exposure
		names = append(names, m.name)
	}
	if len(names) == 0 {
		return ""
	}
	text := fmt.Sprintf("first %s of %s", all, dateIn(ix.cfg.Zone, ix.cal.Start(slot)))
	if !summed {
		return text
	}
	slices.Sort(names)
	if more := len(names) - mostLacking; more > 0 {
		names = append(names[:mostLacking], fmt.Sprintf("%d more", more))
	}
	return text + " of " + strings.Join(names, ", ")
}

// sidesLacking says which sides of a member's slot are not known.
func (ix *indicator) sidesLacking(m *series, slot int64) (lacks sides) {
	_, known := ix.eventsOf(m, slot)
	lacks.events, lacks.exposure = !known, true
	ix.eachExposure(m, slot, slot+1, func(int64, Quantity, bool) { lacks.exposure = false })
	return lacks
}

// String names the sides.
func (s sides) String() string {
	switch {
	case s.events && s.exposure:
		return "events and exposure"
	case s.events:
		return "the events"
	}
	return "the exposure"
}
