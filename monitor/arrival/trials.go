package arrival

import (
	"iter"
	"sort"
)

// LastTrials returns what came at the shortest run of latest instants up to and
// with at that holds n trials or more, and the oldest instant of the run. It is
// false while there are fewer than n trials. n is positive.
func (l *Log) LastTrials(at, n int64) (from int64, seen Count, full bool) {
	last := l.after(at)
	end := l.until(last)
	if end.Trials-l.before.Trials < n {
		return 0, Count{}, false
	}
	// The first run that holds too few begins after the oldest instant.
	i := sort.Search(last, func(i int) bool { return end.Trials-l.entries[i].total.Trials < n })
	return l.entries[i].at, end.minus(l.until(i)), true
}

// Reach returns the latest instant up to which windows of the last n trials reach
// back to at: that with fewer than n trials after at, or at. n is positive.
func (l *Log) Reach(at, n int64) int64 {
	first := l.after(at)
	since := l.until(first).Trials
	i := first + sort.Search(len(l.entries)-first, func(i int) bool { return l.entries[first+i].total.Trials-since >= n })
	if i == first {
		return at
	}
	return l.entries[i-1].at
}

// AgainTrials lists the looks over the last n trials that a change at the
// instants must have made again, in order, each with whether its window is full:
// at each instant that holds events and has fewer than n trials between it and a
// changed one, once. A window that is not full has no look, and what it came to
// before is to be struck out.
func (l *Log) AgainTrials(changed []int64, n int64) iter.Seq2[Look, bool] {
	return func(yield func(Look, bool) bool) {
		l.walk(changed, func(i int, since int64) bool {
			return l.entries[i].total.minus(l.until(l.after(since))).Trials < n
		}, func(i int, _ int64) bool {
			at := l.entries[i].at
			_, seen, full := l.LastTrials(at, n)
			return yield(Look{At: at, Count: seen}, full)
		})
	}
}
