package monitor

import (
	"cmp"
	"slices"
	"time"
)

// retiresAt reports whether it is time, at the boundary, to see which series of the
// indicator have ended: several times within the span after which they retire,
// daily at least.
func (ix *indicator) retiresAt(boundary int64) bool {
	if ix.cfg.Retire == 0 {
		return false
	}
	pace := int64(min(ix.cfg.Retire/16, 24*time.Hour) / time.Microsecond)
	return floorDiv(int64(ix.cal.Start(boundary)), pace) != floorDiv(int64(ix.cal.Start(boundary-1)), pace)
}

// retire ends the series of which nothing was heard for so long that they retire.
// Of what they hold nothing is left by then but what stands in the archive.
func (e *Engine) retire(ix *indicator, now Instant) {
	var over []*series
	for _, s := range ix.series {
		if e.isOver(s, now) {
			over = append(over, s)
		}
	}
	if len(over) == 0 {
		return
	}
	over, sums := withSums(over)
	e.account.Retired += int64(len(over))
	for _, s := range over {
		s.rouse()
		e.trim(s)
		for _, h := range s.heirs {
			h.heir.sources = slices.DeleteFunc(h.heir.sources, func(x *series) bool { return x == s })
		}
		e.end(s, now, false)
	}
	left := func(s *series) bool { return s.retired }
	ix.series = slices.DeleteFunc(ix.series, left)
	ix.sums = slices.DeleteFunc(ix.sums, left)
	e.recent, ix.total, ix.drawn.epoch = nil, total{}, never
	e.because = "a member has ended"
	for _, sum := range sums {
		if !sum.retired {
			sum.sum.members = slices.DeleteFunc(sum.sum.members, left)
			for _, c := range e.changeSum(nil, sum, max(ix.kept, sum.birth), ix.looked-1) {
				e.rerun(c)
			}
		}
	}
	e.because = ""
}

// isOver reports whether the series retires: nothing was heard of it for so long,
// no window can see anything of it, and nobody has to do with an alert of it.
// Members of gathered sums stay: other partitions know of them.
func (e *Engine) isOver(s *series, now Instant) bool {
	ix := s.indicator
	if n := len(s.cells); n > 0 && s.cells[n-1].slot >= ix.kept || s.sum != nil || s.news != nil || s.heir != nil || len(s.marked) > 0 || !s.isAtRest() {
		return false
	}
	heard := s.heardAt()
	if heard == Beginning || now < heard.Add(ix.cfg.Retire) || s.arrivals != nil && s.arrivals.log.Len() > 0 {
		return false
	}
	if s.dates != nil { // some of them may be forgotten by now
		if d := e.datesOf(ix, s.name); d != nil && d.outs.touch(ix.cal.Slot(now.Add(-ix.cfg.Retire)), ix.cal.Slot(now)+1) {
			return false // people said why
		}
	}
	return !ix.cfg.Names(s.name) && !slices.ContainsFunc(s.heirs, func(h *series) bool { return h.heir.until > ix.kept })
}

// isAtRest reports whether no alert of the series is left that anything can still
// happen to.
func (s *series) isAtRest() bool {
	isAtRest := func(t *tail) bool { return t.current == nil && len(t.past) == 0 }
	return isAtRest(&s.tails[upper]) && isAtRest(&s.tails[lower]) && (s.silence == nil || isAtRest(s.silence))
}

// withSums returns those that may end, with the sums that end with their last
// member, and all sums of which members end. Where something has to do with a sum
// still, its members stay until that is over.
func withSums(over []*series) (all, sums []*series) {
	ends, known := map[*series]bool{}, map[*series]bool{}
	for _, s := range over {
		for _, sum := range s.sums {
			if !known[sum] {
				known[sum] = true
				sums = append(sums, sum)
			}
		}
		ends[s] = true
	}
	if len(sums) == 0 {
		return over, nil
	}
	slices.SortFunc(sums, func(a, b *series) int { return cmp.Compare(a.number, b.number) })
	stays := func(s *series) bool { return !ends[s] }
	for _, sum := range sums {
		if !slices.ContainsFunc(sum.sum.members, stays) && (!sum.isAtRest() || sum.heir != nil || len(sum.marked) > 0) {
			for _, m := range sum.sum.members {
				delete(ends, m)
			}
		}
	}
	all = slices.DeleteFunc(over, stays)
	for _, sum := range sums {
		if !slices.ContainsFunc(sum.sum.members, stays) {
			all = append(all, sum)
		}
	}
	return all, sums
}
