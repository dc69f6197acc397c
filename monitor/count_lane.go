package monitor

import "slices"

// countLane is what one partition has told, in order.
type countLane struct {
	Begun bool `json:"begun,omitempty"`
	Ended bool `json:"ended,omitempty"`
	// First is the first boundary counted, never where that is not known, and
	// Complete the latest of which all parts have come.
	First    int64 `json:"first"`
	Complete int64 `json:"complete"`
	// Through is the boundary of the latest part, Parts how many of it have come,
	// and Open says that more will.
	Through int64 `json:"through"`
	Parts   int   `json:"parts"`
	Open    bool  `json:"open,omitempty"`
	// Counts are those that are not yet in force, or were not yet passed over.
	Counts []*count `json:"counts,omitempty"`
}

// done is the boundary through which the partition has told.
func (l *countLane) done() int64 {
	switch {
	case !l.Begun:
		return never
	case l.Ended:
		return maxBoundary
	}
	return l.Complete
}

// receive takes what a partition tells, unless it came before. gap says that
// something is missing before it.
func (l *countLane) receive(s *Summary) (repeat, gap bool) {
	switch {
	case s.ends:
		if l.Ended || !l.Begun {
			return true, false
		}
		l.Ended = true
		return false, false
	case l.Ended || l.Begun && (s.through < l.Through || s.through == l.Through && (!l.Open || s.part < l.Parts)):
		return true, false
	case !l.Begun:
		gap = !s.begins || s.part > 0
		if l.Begun, l.First, l.Complete = true, s.through, never; gap {
			l.First = never // nobody knows since when it counts
		}
	case l.Open:
		gap = s.through != l.Through || s.part != l.Parts
	default:
		gap = s.part > 0 || s.after > l.Through
	}
	n := len(l.Counts) - 1
	switch {
	case s.part > 0 && n >= 0 && l.Open && l.Counts[n].Through == s.through:
		l.Counts[n].Pools = append(l.Counts[n].Pools, s.count.Pools...)
	case s.part == 0: // without the first part, which has the numbers, it told nothing
		x := *s.count
		x.After, x.Through, x.Pools = s.after, s.through, slices.Clone(x.Pools)
		l.Counts = append(l.Counts, &x)
	}
	if l.Through, l.Parts, l.Open = s.through, s.part+1, s.more; !s.more {
		l.Complete = s.through
	}
	return false, gap
}

// at returns what the partition told of a boundary. There it had nothing to count
// if zero is true; where both say nothing, it told nothing.
func (l *countLane) at(boundary int64) (x *count, zero bool) {
	if boundary < l.First {
		return nil, true
	}
	for _, x := range l.Counts {
		switch {
		case x.Nothing && x.After < boundary && boundary <= x.Through:
			return nil, true
		case x.Through == boundary:
			return x, false
		}
	}
	return nil, l.Ended && boundary > l.Complete
}
