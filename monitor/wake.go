package monitor

import (
	"cmp"
	queue "container/heap"
	"fmt"
	"time"

	"tailbell/config"
	"tailbell/monitor/life"
)

// What happens to an alert by itself happens at a moment of the stream's time:
// it comes off the shelf, or people are reminded that nobody has acknowledged
// it. None of it is stored: it follows from the record, the set-up and the
// clock.

// LongestShelf is how far ahead an alert may be shelved.
const LongestShelf = 366 * 24 * time.Hour

// TimeIsOver is the reason given when an alert comes off the shelf by itself.
const TimeIsOver = "the time is over"

// unshelvable says why an alert can't be shelved until then; "" if it can.
func (e *Engine) unshelvable(until Instant) string {
	switch {
	case until <= e.clock:
		return fmt.Sprintf("it would be shelved until %s, which is not after the stream's clock %s", at(until), at(e.clock))
	case until > e.clock.Add(LongestShelf):
		return fmt.Sprintf("it would be shelved until %s, more than %s after the stream's clock %s: shelve it for less, and again if need be",
			at(until), config.FormatDuration(LongestShelf), at(e.clock))
	}
	return ""
}

// wake is the moment at which something happens to an alert by itself. One that
// is not the alert's present wake is out of date.
type wake struct {
	at    Instant
	alert *alert
}

// wakes is a heap of them, the earliest first.
type wakes []wake

func (w wakes) Len() int      { return len(w) }
func (w wakes) Swap(i, j int) { w[i], w[j] = w[j], w[i] }

func (w wakes) Less(i, j int) bool {
	a, b := w[i].alert, w[j].alert
	return cmp.Or(cmp.Compare(w[i].at, w[j].at), cmp.Compare(a.series.number, b.series.number),
		cmp.Compare(a.tail, b.tail), cmp.Compare(a.record.Number, b.record.Number)) < 0
}

// Push appends x; it is called by package heap alone.
func (w *wakes) Push(x any) {
	if next, ok := x.(wake); ok {
		*w = append(*w, next)
	}
}

// Pop removes the last one; it is called by package heap alone.
func (w *wakes) Pop() any {
	old := *w
	last := old[len(old)-1]
	*w = old[:len(old)-1]
	return last
}

// waits is what an alert waits for: the end of its shelf time, or somebody who
// acknowledges it since then.
type waits struct {
	shelf bool
	since Instant
}

func waitsOf(r *life.Record) waits {
	if r.Shelf != nil {
		return waits{true, InstantOf(r.Shelf.Until)}
	}
	if since, ok := r.Unheeded(); ok {
		return waits{false, InstantOf(since)}
	}
	return waits{false, Never}
}

// rewake finds the next wake of the alert after a moment.
func (e *Engine) rewake(a *alert, after Instant) {
	a.wake = Never
	w := waitsOf(&a.record)
	every := a.series.indicator.cfg.Remind.Microseconds()
	switch {
	case w.shelf:
		a.wake = w.since
	case w.since != Never && every > 0 && !e.history:
		passed := max(0, floorDiv(int64(after-w.since), every))
		a.wake = w.since + Instant((passed+1)*every)
	}
	if a.wake != Never {
		queue.Push(&e.wakes, wake{a.wake, a})
	}
}

// rewakeAll does so for every alert, as something that holds for all of them
// has changed.
func (e *Engine) rewakeAll() {
	e.wakes = nil
	for _, a := range e.alerts {
		e.rewake(a, e.clock)
	}
}

// nextWake returns the earliest wake, Never if there is none.
func (e *Engine) nextWake() Instant {
	for len(e.wakes) > 0 && e.wakes[0].alert.wake != e.wakes[0].at {
		queue.Pop(&e.wakes)
	}
	if len(e.wakes) == 0 {
		return Never
	}
	return e.wakes[0].at
}

// awake lets happen what happens by itself up to a moment, on the clock's way to
// another. Of the reminders that fall due on that way only the first is given.
func (e *Engine) awake(until, to Instant) {
	for min(e.nextWake(), e.nextDeadline()) <= until && len(e.wakes)+len(e.deadlines) > 0 {
		if e.nextDeadline() < e.nextWake() {
			e.fallSilent()
			continue
		}
		a, moment := e.wakes[0].alert, e.wakes[0].at
		queue.Pop(&e.wakes)
		if ix := a.series.indicator; e.behind(ix, moment) {
			continue // it happens when they have come to it
		}
		e.wakeUp(a, moment, to)
	}
}
