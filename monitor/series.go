package monitor

import (
	"cmp"
	"math"
	"slices"

	"tailbell/config"
)

// unborn is the birth of a series that has no slot yet.
const unborn = math.MaxInt64

// series is the state of one series.
type series struct {
	number  uint32
	touched bool
	// fresh says that no patch has named the series yet, or that what older
	// ones say of it holds no more.
	fresh bool
	// retired says that it is monitored no longer: there is a stub in its place.
	retired bool
	// resting says that it is not visited at boundaries before alarm.
	resting   bool
	name      string
	indicator *indicator
	// birth is the first slot that counts: no window reaches before it.
	birth int64
	// trimmed is the slot before which cells are forgotten.
	trimmed int64
	// unpaired counts the elements in forgotten slots that lacked a side.
	unpaired int64
	// seen is the partition's clock when an observation was last counted.
	seen  Instant
	alarm int64
	cells cells
	// sum is set where the series is one, and sums are those that it is a
	// member of.
	sum  *rollup
	sums []*series
	// news is what the gathered sums that it is a member of are to be told, nil
	// where it is in none; mirror says that it is no series, but what is known of
	// one that a gathered sum sums.
	news   *news
	mirror bool
	// unsummed says of a gathered sum that its cells were not stored.
	unsummed bool
	// heir is set where it took the place of others, and heirs are those that
	// took its own.
	heir  *inheritance
	heirs []*series
	// dates are the acts on series that hold for it, nil for none.
	dates *dates
	// eventIDs are the ids of the observations with events, by slot.
	eventIDs eventIDs
	// array is what the cells lie in, at its end.
	array cells
	// runnings are what the latest looks summed, by window; none while the series
	// rests with few cells.
	runnings []running
	// windows and tails hold what the looks have found, by window and by
	// direction.
	windows []windowState
	tails   [2]tail
	// silence is that of the whole series, of which nothing is looked at; nil
	// where there was none.
	silence *tail
	// base is the baseline that serves the series under the stanza baseOf.
	base   *config.Baseline
	baseOf *config.Indicator
	// references are the estimates of the usual rate that looks inside the
	// horizon were judged by, oldest first; comparator is the first trailing
	// one, kept to show slow creep beside those that follow.
	references []reference
	// limits are those on p that follow from an allowance, for looks inside the
	// horizon, oldest first.
	limits     []limits
	comparator *reference
	// own is what it had a part in of what its partition counted, nil for nothing.
	own *own
	// marked are the spans that people marked real.
	marked []markedSpan
	// dirty lists the slots changed since the last drain, if touched.
	dirty []int64
	// watched counts the looks by window while the engine is passing.
	watched *[]watch
	// next is the series that was asked for after this one the last time.
	next *series
	// arrivals are kept where looks are made at them, else nil.
	arrivals *arrivals
	// totals are kept where counters are read, else nil.
	totals *totals
}

// windowState is what the looks of one window have come to.
type windowState struct {
	// made is the boundary of the latest look that could be made.
	made    int64
	hasMade bool
	// withheld says why the latest look was not made, since which boundary.
	withheld status
	// rests is what its looks come to while the series rests.
	rests         status
	withheldSince int64
	// edges are those that the latest look was compared with.
	edges [2]*edges
}

// tail is one direction of a series.
type tail struct {
	// lit are the looks that signal, inside the horizon, by boundary, window;
	// beyond it the latest of each window, until that makes another.
	lit []litLook
	// current is the alert that is signalling, nil for none.
	current *alert
	// disarmed says that no alert may open until enough looks were quiet: one
	// was closed by hand while it signalled.
	disarmed bool
	// quiet counts the looks in a row at which nothing signalled.
	quiet int32
	// opened counts the alerts that were ever opened.
	opened int32
	// past are alerts that have left, but are not done or lie inside the
	// horizon.
	past []*alert
}

// litLook is one look that signals.
type litLook struct {
	boundary int64
	occasion occasion
	window   int
	events   int64
	exposure Quantity
	log10p   float64
	at       Instant // when it was made
	alert    *alert  // nil if it opened or joined none
}

func compareLit(a, b litLook) int {
	if a.boundary != b.boundary {
		if a.boundary < b.boundary {
			return -1
		}
		return 1
	}
	return cmp.Or(a.occasion.compare(b.occasion), a.window-b.window)
}

// tail returns one direction of the series.
func (s *series) tail(d direction) *tail {
	if d == silence {
		if s.silence == nil {
			s.silence = new(tail)
		}
		return s.silence
	}
	return &s.tails[d]
}

// litAt returns the index of the look at slots among the lit ones.
func (t *tail) litAt(boundary int64, window int) (int, bool) {
	return slices.BinarySearchFunc(t.lit, litLook{boundary: boundary, window: window}, compareLit)
}

// litOf is litAt for a look of any kind.
func (t *tail) litOf(l *look) (int, bool) {
	return slices.BinarySearchFunc(t.lit, litLook{boundary: l.boundary, occasion: l.occasion, window: l.window}, compareLit)
}

func (t *tail) set(l litLook) {
	i, ok := slices.BinarySearchFunc(t.lit, l, compareLit)
	if ok {
		t.lit[i] = l
		return
	}
	t.lit = slices.Insert(t.lit, i, l)
}

// of counts the lit looks that belong to the alert.
func (t *tail) of(a *alert) int {
	n := 0
	for i := range t.lit {
		if t.lit[i].alert == a {
			n++
		}
	}
	return n
}

// trim forgets the cells before the indicator's floor, and what the looks
// found at or before its frozen boundary. When it is called makes no
// difference to any look.
func (e *Engine) trim(s *series) {
	ix := s.indicator
	if ix.kept <= s.trimmed {
		return
	}
	s.trimmed = ix.kept
	n, _ := s.cells.find(ix.kept)
	for i := range s.cells[:n] {
		c := &s.cells[i]
		if s.sum != nil || s.inherited(c.slot) {
			continue
		}
		if !s.needs().paired(c) {
			s.unpaired += int64(c.items)
		}
		e.archive(s, c)
	}
	if n > 0 {
		if s.cells = s.cells[n:]; len(s.cells) == 0 { // else they move when the list has to grow
			s.cells, s.array = nil, nil
		}
		s.eventIDs.forget(ix.kept)
		e.touch(s)
	}
	s.forget(ix)
	if s.forgetArrivals() {
		e.touch(s)
	}
	for d := range s.tails {
		if s.tails[d].trim(ix.frozenAt, s.windows, e.alerts) {
			e.touch(s)
		}
	}
	if s.silence != nil {
		s.silence.trim(ix.frozenAt, s.windows, e.alerts)
	}
}

// forget drops the estimates and marks that no look will need again.
func (s *series) forget(ix *indicator) {
	s.forgetReferences(ix.frozenAt)
	s.forgetLimits(ix.frozenAt)
	s.marked = slices.DeleteFunc(s.marked, func(m markedSpan) bool { return m.to <= ix.kept })
}

// trim freezes what can't change any more: looks at or before the boundary,
// and finished alerts that ended there. Of those looks it keeps the latest
// that their windows could make: they still say whether the window signals. It
// reports whether a look was forgotten.
func (t *tail) trim(frozen int64, windows []windowState, alerts map[string]*alert) bool {
	if len(t.lit) == 0 && len(t.past) == 0 {
		return false
	}
	n, kept := 0, 0
	for ; n < len(t.lit) && t.lit[n].boundary <= frozen; n++ {
		l := t.lit[n]
		if l.alert != nil {
			l.alert.frozen = true
		}
		if ws := &windows[l.window]; !l.occasion.arrival && ws.hasMade && ws.made == l.boundary {
			t.lit[kept] = l
			kept++
		}
	}
	t.lit = slices.Delete(t.lit, kept, n)
	t.past = slices.DeleteFunc(t.past, func(a *alert) bool {
		gone := a.gone() && !t.holds(a, frozen)
		if gone {
			delete(alerts, a.record.ID)
		}
		return gone
	})
	return kept < n
}

// holds reports whether looks after the boundary belong to the alert: such at
// arrivals may, in the slot in which it was closed by hand.
func (t *tail) holds(a *alert, frozen int64) bool {
	return slices.ContainsFunc(t.lit, func(l litLook) bool { return l.alert == a && l.boundary > frozen })
}

// gone reports whether nothing can happen to the alert any more: it is done, and
// ended beyond the horizon and beyond the history that a baseline is counted
// from, where a mark could still matter.
func (a *alert) gone() bool {
	ix := a.series.indicator
	return a.record.Done() && (a.last <= ix.frozenAt && a.last <= ix.frozenAt-historyOf(ix.cfg))
}
