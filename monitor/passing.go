package monitor

import (
	"slices"

	"tailbell/monitor/life"
)

// Findings are what an engine that nothing stores has found.
type Findings struct {
	// Steps are the new alert steps, and Refused the new refusals, in stream
	// order.
	Steps   []life.Notice
	Refused []Refusal
}

// Pass makes the engine one that nothing stores, as for a replay: Findings
// takes the place of Drain, slots that leave memory are not handed over, and
// Watched says how long and how often each window was looked at. Call it
// before the first message.
func (e *Engine) Pass() {
	e.rouseAll()
	e.passing = true
}

// Findings hands over what was found since the last time, and forgets what a
// store would have been given.
func (e *Engine) Findings() Findings {
	f := Findings{Steps: e.steps, Refused: e.refused}
	for _, s := range e.touched {
		s.touched, s.fresh, s.dirty = false, false, s.dirty[:0]
		s.drainArrivals()
	}
	for _, a := range e.changed {
		a.dirty = false
	}
	clear(e.changed)
	e.drained, e.touched, e.changed = e.position, e.touched[:0], e.changed[:0]
	e.steps, e.refused, e.archived, e.settings = nil, nil, nil, nil
	e.ids.touched, e.ids.dropped = nil, nil
	for _, x := range e.stubs.touched {
		x.touched = false
	}
	e.stubs.touched = nil
	e.told, e.kept, e.released = nil, nil, nil
	e.forgetNothing()
	return f
}

// MostIDs returns the largest number of ids that were kept at once since Pass.
func (e *Engine) MostIDs() int { return e.ids.most }

// Watched is what one window of one series was looked at, since Pass.
type Watched struct {
	Series, Indicator, Window string
	// Looks were made when due, Withheld ones could not be.
	Looks, Withheld int64
	// First and Last are when the first and the last look made fell due; both
	// are 0 where none was made.
	First, Last Instant
}

// watch counts the looks of one window.
type watch struct {
	looks, withheld int64
	first, last     Instant
}

// watch counts a look that was made, or withheld, when it fell due.
func (e *Engine) watch(s *series, l *look) {
	if !e.passing || l.status == filling {
		return
	}
	s.watchAll()
	w := &(*s.watched)[l.window]
	if l.status != made {
		w.withheld++
		return
	}
	w.made(l.at)
}

func (w *watch) made(due Instant) {
	if w.looks++; w.looks == 1 {
		w.first = due
	}
	w.last = due
}

// watchAll makes room for counting the looks of every window.
func (s *series) watchAll() {
	if s.watched == nil {
		s.watched = new([]watch)
	}
	if n := len(s.windows) - len(*s.watched); n > 0 {
		*s.watched = append(*s.watched, make([]watch, n)...)
	}
}

// watched counts a look of the window that was made when due.
func (e *Engine) watched(s *series, window int, due Instant) {
	s.watchAll()
	(*s.watched)[window].made(due)
}

// Watched returns what was looked at since Pass, by series in order of
// appearance and by window; series that have ended come first.
func (e *Engine) Watched() []Watched {
	list := slices.Clone(e.formerly)
	for _, s := range e.series {
		list = append(list, s.watchedAs()...)
	}
	return list
}

func (s *series) watchedAs() (list []Watched) {
	if s.watched == nil {
		return nil
	}
	for i, w := range *s.watched {
		list = append(list, Watched{
			Series: s.name, Indicator: s.indicator.cfg.Name, Window: s.indicator.places[i].Name,
			Looks: w.looks, Withheld: w.withheld, First: w.first, Last: w.last,
		})
	}
	return list
}

// Found reports whether there are steps that Findings would hand over.
func (e *Engine) Found() bool { return len(e.steps) > 0 }
