package arrival

import (
	"iter"
	"math"
	"slices"
)

// Look is what a look at an arrival sees: the instant, the place of its window
// in the list that was asked for, and what came in it.
type Look struct {
	At     int64
	Window int
	Count
}

// Span returns what came in (at-width, at], whether or not anything came at at.
// The width is positive.
func (l *Log) Span(at, width int64) Count {
	last := l.after(at)
	return l.until(last).minus(l.until(l.after(earlier(at, width))))
}

// earlier returns at-width, or the smallest number there is.
func earlier(at, width int64) int64 {
	if at < math.MinInt64+width {
		return math.MinInt64
	}
	return at - width
}

// Instants lists the instants in [from, to] with what came at each, in order.
func (l *Log) Instants(from, to int64) iter.Seq2[int64, Count] {
	return func(yield func(int64, Count) bool) {
		i, _ := l.find(from)
		for ; i < len(l.entries) && l.entries[i].at <= to; i++ {
			if !yield(l.entries[i].at, l.own(i)) {
				return
			}
		}
	}
}

// Again lists the looks that a change at the instants must have made again, in
// order of instant and window: at each instant that holds events, over each
// span of a width that reaches back to a changed one, once. The Log is as it is
// after the change, and stays so during the walk.
func (l *Log) Again(changed, widths []int64) iter.Seq[Look] {
	return func(yield func(Look) bool) {
		if len(widths) == 0 {
			return
		}
		longest := slices.Max(widths)
		l.walk(changed, func(i int, since int64) bool {
			return earlier(l.entries[i].at, longest) < since
		}, func(i int, since int64) bool {
			at := l.entries[i].at
			for j, w := range widths {
				if earlier(at, w) < since && !yield(Look{at, j, l.Span(at, w)}) {
					return false
				}
			}
			return true
		})
	}
}

// walk calls use for the indices of the instants with events at or after a
// changed one, each with the latest changed one that is not after it, as long
// as reaches holds of them; where it fails it goes on from the next changed
// one. It ends when use returns false.
func (l *Log) walk(changed []int64, reaches, use func(i int, since int64) bool) {
	changed = slices.Compact(slices.Sorted(slices.Values(changed)))
	for n, since := range changed {
		i, _ := l.find(since)
		for ; i < len(l.entries); i++ {
			if n+1 < len(changed) && l.entries[i].at >= changed[n+1] || !reaches(i, since) {
				break
			}
			if l.own(i).Events > 0 && !use(i, since) {
				return
			}
		}
	}
}
