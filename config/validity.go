package config

import (
	"fmt"
	"slices"
	"time"
)

// readValidity reads from when to when a baseline is valid.
func (s section) readValidity(in *Indicator) (from, to time.Time, ok bool) {
	from, fromOK := s.instant("from", in.Zone)
	to, toOK := s.instant("to", in.Zone)
	ok = fromOK && toOK
	if ok && !from.IsZero() && !to.IsZero() && !from.Before(to) {
		s.fault("to", "is not after from: the baseline would never be valid", "exchange from and to?")
		ok = false
	}
	return from, to, ok
}

// readServed reads which series of the indicator a baseline serves. earlier are
// those before it with which it may collide.
func (s section) readServed(in *Indicator, b *Baseline, earlier []Baseline, last bool) Pattern {
	all := NewPattern("**")
	n, given, ok := s.get("series", textKind)
	if !ok {
		return all
	}
	p := all
	if given {
		if p, ok = s.patternOf(n, s.key("series")); !ok {
			return all
		}
	}
	covered := func(e Baseline) bool {
		open := e.From.IsZero() && e.To.IsZero() // for every series that is a fault of e
		return (e.Series == p || e.Series == all) && (e.Series != all || !open) && e.covers(b)
	}
	switch {
	case last && p != all:
		s.fault("series", "the last baseline must serve every series that is left", "leave series out here, or add a baseline without it")
	case !last && p == all && b.From.IsZero() && b.To.IsZero():
		s.fault("series", "this baseline serves every series, so those after it are never used",
			"say which series it serves, or put it last")
	case p == all && slices.ContainsFunc(earlier, covered):
		s.fault("from", "a baseline before this one serves every series at all these times, so that this one is never used", "keep one, or make their times differ")
	case p != all && slices.ContainsFunc(earlier, covered):
		s.fault("series", fmt.Sprintf("%q has a baseline already, and the first is used", n.text), "keep one, or make their times differ")
	case p != all && !slices.ContainsFunc(in.Series, func(q Pattern) bool { _, both := overlap(p, q); return both }):
		s.fault("series", fmt.Sprintf("%q matches no series of this indicator", n.text), "compare it with the indicator's own patterns")
	}
	return p
}

// covers reports whether b is valid whenever c is.
func (b *Baseline) covers(c *Baseline) bool {
	return (b.From.IsZero() || (!c.From.IsZero() && !c.From.Before(b.From))) &&
		(b.To.IsZero() || (!c.To.IsZero() && !c.To.After(b.To)))
}

// uncovered returns when, between open ends, no baseline of the last one's
// pattern is valid; the ends of a gap are zero where it is open.
func (in *Indicator) uncovered() (gaps [][2]time.Time) {
	var all []*Baseline
	for i := range in.Baselines {
		if b := &in.Baselines[i]; b.Series == in.Baselines[len(in.Baselines)-1].Series {
			all = append(all, b)
		}
	}
	slices.SortStableFunc(all, func(a, b *Baseline) int { return a.From.Compare(b.From) })
	reached, begun := time.Time{}, false
	for _, b := range all {
		switch {
		case !begun && b.From.IsZero():
		case !begun || b.From.After(reached):
			gaps = append(gaps, [2]time.Time{reached, b.From})
		}
		begun = true
		if b.To.IsZero() {
			return gaps
		}
		if b.To.After(reached) {
			reached = b.To
		}
	}
	return append(gaps, [2]time.Time{reached, {}})
}
