package allowances

import (
	"strconv"
	"strings"

	"tailbell/monitor"
	"tailbell/monitor/life"
)

// tally counts what an engine makes of the series of a cell.
type tally struct {
	cell  *Cell
	parts int // windows times tails, and looks at arrivals
	// from is when counting begins.
	from   monitor.Instant
	series []seen
	// lit says which look of a series, window and tail signalled last, and
	// looked whether there was one.
	lit, looked []bool
	windows     map[string]int
	limits      []span
	looks, dark int64
	told        float64 // false alerts a year that the alerts speak of, summed
	tellers     int64
	// books are the trials of each series, before what its windows of trials held
	// until the latest batch, and tails p-values that were asked for.
	books  []book
	before []batch
	tails  map[batch]float64
}

// seen is what one series came to.
type seen struct {
	// crossings are looks that signal where the look before did not, firsts
	// signalling looks without one before; alerts opened, late of them by looks
	// that were made again.
	crossings, firsts, alerts, late int64
}

// span is the least and the largest of a limit.
type span struct{ low, high float64 }

func newTally(c *Cell, series int) *tally {
	t := &tally{cell: c, parts: 3 * len(c.names()), series: make([]seen, series), windows: map[string]int{}}
	for i, name := range c.names() {
		t.windows[name] = i
	}
	t.books, t.tails = make([]book, series), map[batch]float64{}
	t.from = beginning
	if !c.Whole {
		t.from += monitor.Instant(c.longest()) * monitor.Instant(c.slot().Microseconds())
	}
	t.lit, t.looked = make([]bool, series*t.parts), make([]bool, series*t.parts)
	t.limits = make([]span, t.parts)
	return t
}

// years is how long each series is counted for.
func (t *tally) years() float64 {
	slots := t.cell.Slots
	if !t.cell.Whole {
		slots -= t.cell.longest()
	}
	return float64(slots) / t.cell.slotsPerYear()
}

// number is that of a series, by its name.
func number(series string) int {
	n, err := strconv.Atoi(series[strings.LastIndexByte(series, '-')+1:])
	if err != nil {
		panic("allowances: " + series + " is no series of a cell")
	}
	return n
}

// look counts one look when it falls due.
func (t *tally) look(v monitor.View) {
	if !v.Made {
		return
	}
	w := t.windows[v.Window]
	i := number(v.Series)
	counts := monitor.InstantOf(v.Due) >= t.from
	if v.Arrival {
		t.arrival(&v, 3*w+2, &t.series[i], counts)
		return
	}
	for d, tail := range []*monitor.ViewTail{&v.Upper, &v.Lower} {
		if !tail.Watched {
			continue
		}
		part := 3*w + d
		at := i*t.parts + part
		if t.looks++; !tail.Signals {
			t.dark++
		}
		t.limits[part].hold(tail.Limit)
		if tail.Signals && !t.lit[at] && counts {
			if t.looked[at] {
				t.series[i].crossings++
			} else {
				t.series[i].firsts++
			}
		}
		t.lit[at], t.looked[at] = tail.Signals, true
	}
}

// arrival counts a look at an event that came alone: it crosses if the window
// held one less than its critical count just before. A window of trials crosses if
// the one before did not signal, for an event may have left it.
func (t *tally) arrival(v *monitor.View, part int, s *seen, counts bool) {
	if t.looks++; !v.Upper.Signals {
		t.dark++
	}
	if counts || len(t.cell.Trials) == 0 { // windows of trials have no part in the limits before they have filled
		t.limits[part].hold(v.Upper.Limit)
	}
	crosses := v.Upper.Signals && v.Events == v.Upper.Critical
	if len(t.cell.Trials) > 0 {
		crosses = t.crosses(v, part/3)
	}
	if counts && crosses {
		s.crossings++
	}
}

// hold widens the span to a limit.
func (l *span) hold(limit float64) {
	if l.high == 0 || limit < l.low {
		l.low = limit
	}
	l.high = max(l.high, limit)
}

// opened counts an alert.
func (t *tally) opened(r *life.Record) {
	if a := r.Opening.Allowance; a != nil {
		t.told += a.Here
		t.tellers++
	}
	if monitor.InstantOf(r.Opened) < t.from {
		return
	}
	s := &t.series[number(r.Series)]
	s.alerts++
	if r.Late {
		s.late++
	}
}
