package arrival

import "sort"

// Kth returns the latest instant from which on, up to and with at, k events or
// more came: that of the k-th last event. It is false where fewer are known. k
// is positive.
func (l *Log) Kth(at, k int64) (instant int64, ok bool) {
	last := l.after(at)
	end := l.until(last).Events
	if end-l.before.Events < k {
		return 0, false
	}
	i := sort.Search(last, func(i int) bool { return end-l.entries[i].total.Events < k })
	return l.entries[i].at, true
}

// Previous returns the latest instant before at that holds events: at less it
// is how long there was none. It is false where none is known.
func (l *Log) Previous(at int64) (instant int64, ok bool) {
	i, _ := l.find(at)
	for i--; i >= 0; i-- {
		if l.own(i).Events > 0 {
			return l.entries[i].at, true
		}
	}
	return 0, false
}
