package monitor

import (
	"math"
	"slices"

	"tailbell/config"
	"tailbell/monitor/allowance"
)

// A window of the last n trials of a proportion holds the latest moments, whole,
// that it takes to reach n: package arrival says why. It is looked at when events
// come, as spans of time are of a rate, and what is said of those holds of it.

// windowFrom is the moment after which the window that ends at an instant begins,
// itself not in it; false where it holds too few trials yet.
func (ix *indicator) windowFrom(s *series, w arrivalWindow, at Instant) (Instant, bool) {
	if w.trials == 0 {
		return at - Instant(w.width), true
	}
	if s.arrivals == nil {
		return at, false
	}
	from, _, full := s.arrivals.log.LastTrials(int64(at), w.trials)
	return Instant(from) - 1, full
}

// fills reports whether all of a window that ends at an instant was counted. Of
// the last trials whatever is still in the log counts.
func (ix *indicator) fills(s *series, w arrivalWindow, from Instant, judging, boundary int64) bool {
	if w.trials == 0 {
		return from >= s.countedFrom(ix.epochAt(judging), w.place, boundary)
	}
	begin := s.begin(boundary)
	return begin != unborn && from+1 >= ix.cal.Start(begin)
}

// unmatched reports whether the window (from, to] holds a moment with more events
// than trials: then a trial is still to be told.
func (s *series) unmatched(from, to Instant) bool {
	for _, n := range s.arrivals.log.Instants(int64(from)+1, int64(to)) {
		if n.Events > n.Trials {
			return true
		}
	}
	return false
}

// mostTrials is the longest window of trials that a look inside the horizon is
// made over, 0 for none.
func (ix *indicator) mostTrials() int64 {
	var most int64
	for i := range ix.epochs {
		for _, w := range ix.spans(&ix.epochs[i]) {
			most = max(most, w.trials)
		}
	}
	return most
}

// reachOf is the latest instant up to which windows reach back to one.
func (s *series) reachOf(at Instant) Instant {
	ix := s.indicator
	reach := at + Instant(ix.widest())
	if n := ix.mostTrials(); n > 0 {
		reach = max(reach, Instant(s.arrivals.log.Reach(int64(at), n)))
	}
	return reach
}

// keptFrom is the instant from which on looks inside the horizon need the log.
func (s *series) keptFrom() int64 {
	ix := s.indicator
	frozen := int64(ix.cal.Start(ix.frozenAt))
	from := frozen - ix.widest() - ix.cal.nominal()
	n := ix.mostTrials()
	if n == 0 {
		return from
	}
	first, _, full := s.arrivals.log.LastTrials(frozen-1, n)
	if !full {
		return s.arrivals.log.Floor()
	}
	return min(from, first)
}

// fourWeeks is so many slots, one at least.
func (c *Calendar) fourWeeks() int64 {
	const length = 28 * day
	switch {
	case c.length > 0:
		return max(1, length/c.length)
	case c.every.Unit == config.Day:
		return 28
	case c.every.Unit == config.Week:
		return 4
	}
	return 1
}

// planTrials fills in what windows of trials are planned for. One that has not
// filled yet has no part in the limits: how many trials come is hardly known then,
// and it is not looked at anyway. It reports false where no other window is left.
func (ix *indicator) planTrials(s *series, p *allowance.Plan, boundary int64) bool {
	p.Volume, p.Batch = ix.volume(s, boundary), s.batches()
	looked := false
	for i := range p.Windows {
		w := &p.Windows[i]
		if w.Trials > 0 && s.arrivals != nil {
			_, _, full := s.arrivals.log.LastTrials(math.MaxInt64, w.Trials)
			w.Arrival = full
		}
		looked = looked || w.Slot || w.Arrival
	}
	return looked
}

// volume is how many trials a slot brought on average in the busiest four weeks
// of those inside the horizon (the latest four where it is shorter), or since the
// series began; 0 where none came.
func (ix *indicator) volume(s *series, boundary int64) float64 {
	from := max(min(ix.frozenAt, boundary-ix.cal.fourWeeks()), s.birth, ix.kept)
	if from >= boundary {
		return 0
	}
	trials := make([]float64, boundary-from)
	ix.eachExposure(s, from, boundary, func(slot int64, q Quantity, _ bool) { trials[slot-from] = q.Float(0) })
	block := min(ix.cal.fourWeeks(), boundary-from)
	var sum, most float64
	for i, n := range trials {
		if sum += n; int64(i) >= block {
			sum -= trials[int64(i)-block]
		}
		most = max(most, sum)
	}
	return most / float64(block)
}

// batches are the least and the largest number of trials that came at one moment:
// alike, or from 1 up to a number of eight to the octave.
func (s *series) batches() [2]int64 {
	if s.arrivals == nil {
		return [2]int64{1, 1}
	}
	least, most := int64(math.MaxInt64), int64(0)
	for _, n := range s.arrivals.log.Instants(s.arrivals.log.Floor(), math.MaxInt64) {
		if n.Trials > 0 {
			least, most = min(least, n.Trials), max(most, n.Trials)
		}
	}
	switch {
	case most == 0:
		return [2]int64{1, 1}
	case least == most:
		return [2]int64{least, most}
	}
	up, _ := eighths(float64(most))
	return [2]int64{1, int64(math.Ceil(up))}
}

// ofTrials reports whether a stanza has windows of trials.
func ofTrials(cfg *config.Indicator) bool {
	return slices.ContainsFunc(cfg.Windows, func(w config.Window) bool { return w.Trials > 0 })
}

// latestOfTrials are the latest n looks over the last trials up to a moment, oldest
// first, as far back as slots are still in memory, however long ago they came.
func (e *Engine) latestOfTrials(s *series, window string, to Instant, n int) []View {
	p := s.indicator.named(window)
	if s.arrivals == nil || p == nil {
		return nil
	}
	from, first := int64(to)+1, int64(s.indicator.cal.Start(max(s.birth, s.trimmed)))
	for range n {
		at, ok := s.arrivals.log.Previous(from)
		if !ok || at < first {
			break
		}
		from = at
	}
	views := e.arrivalViews(s, p.place, Instant(from), to+1)
	return views[max(len(views)-n, 0):]
}
