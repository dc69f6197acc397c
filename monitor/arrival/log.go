package arrival

import (
	"cmp"
	"errors"
	"fmt"
	"math"
	"slices"
)

// ErrForgotten is returned for a change at an instant that was forgotten.
var ErrForgotten = errors.New("arrival: the instant is forgotten")

// ErrNotThere is returned when more is taken back than came.
var ErrNotThere = errors.New("arrival: there is not so much to take back")

// Count is what came at an instant, or in a span. Late are those of the events
// that came after their time.
type Count struct{ Events, Trials, Late int64 }

func (c Count) plus(d Count) Count {
	return Count{c.Events + d.Events, c.Trials + d.Trials, c.Late + d.Late}
}

func (c Count) minus(d Count) Count {
	return Count{c.Events - d.Events, c.Trials - d.Trials, c.Late - d.Late}
}

// Minus returns the change that takes the count back.
func (c Count) Minus() Count { return Count{}.minus(c) }

// valid reports whether so much can have come.
func (c Count) valid() bool {
	return c.Events >= 0 && c.Trials >= 0 && c.Late >= 0 && c.Late <= c.Events
}

// Log is what came when, in one series. The zero Log is empty and ready.
type Log struct {
	entries []entry
	// before is the total of what was forgotten.
	before Count
	// floor is the instant before which all is forgotten, if any was.
	floor  int64
	forgot bool
}

// entry is one instant with the total of all that came up to and with it.
type entry struct {
	at    int64
	total Count
}

// Len returns the number of instants.
func (l *Log) Len() int { return len(l.entries) }

// Floor returns the instant before which everything is forgotten: the smallest
// number there is, if nothing was.
func (l *Log) Floor() int64 {
	if !l.forgot {
		return math.MinInt64
	}
	return l.floor
}

// At returns what stands at the instant; nothing is the zero Count.
func (l *Log) At(at int64) Count {
	i, ok := l.find(at)
	if !ok {
		return Count{}
	}
	return l.own(i)
}

// Change adds to what stands at the instant, or takes back from it where by is
// negative. A correction of one observation is two changes, or one if its
// instant stays. On an error nothing is changed.
func (l *Log) Change(at int64, by Count) error {
	if at < l.Floor() {
		return fmt.Errorf("%w: %d lies before %d", ErrForgotten, at, l.floor)
	}
	if by == (Count{}) {
		return nil
	}
	i, found := l.find(at)
	var was Count
	if found {
		was = l.own(i)
	}
	now := was.plus(by)
	if !now.valid() {
		return fmt.Errorf("%w: %+v stands at %d, and %+v is to change it", ErrNotThere, was, at, by)
	}
	switch {
	case !found:
		l.makeRoom()
		l.entries = slices.Insert(l.entries, i, entry{at, l.until(i)})
	case now == Count{}:
		l.entries = slices.Delete(l.entries, i, i+1)
	}
	for j := i; j < len(l.entries); j++ {
		l.entries[j].total = l.entries[j].total.plus(by)
	}
	return nil
}

// Forget drops all instants before floor. Windows that reach further back see
// no more than what is left: look no further back than that.
func (l *Log) Forget(floor int64) {
	if floor <= l.Floor() {
		return
	}
	n, _ := l.find(floor)
	if n > 0 {
		l.before = l.entries[n-1].total
		l.entries = slices.Delete(l.entries, 0, n)
		l.shrink()
	}
	l.floor, l.forgot = floor, true
}

// find returns the index of the instant, or where it would stand.
func (l *Log) find(at int64) (int, bool) {
	n := len(l.entries)
	switch {
	case n == 0 || l.entries[n-1].at < at:
		return n, false
	case l.entries[n-1].at == at:
		return n - 1, true
	}
	return slices.BinarySearchFunc(l.entries, at, func(e entry, at int64) int { return cmp.Compare(e.at, at) })
}

// after returns the index of the first instant after at.
func (l *Log) after(at int64) int {
	i, found := l.find(at)
	if found {
		i++
	}
	return i
}

// until returns the total of what came before the i-th instant.
func (l *Log) until(i int) Count {
	if i == 0 {
		return l.before
	}
	return l.entries[i-1].total
}

// own returns what came at the i-th instant.
func (l *Log) own(i int) Count { return l.entries[i].total.minus(l.until(i)) }

// makeRoom grows a full list by a quarter: there are very many of them.
func (l *Log) makeRoom() {
	if n := len(l.entries); n == cap(l.entries) {
		l.entries = append(make([]entry, 0, n+n/4+2), l.entries...)
	}
}

// shrink gives back memory of which most is unused.
func (l *Log) shrink() {
	if n := len(l.entries); cap(l.entries) > 16 && n < cap(l.entries)/4 {
		l.entries = append(make([]entry, 0, n+n/4+2), l.entries...)
	}
}
