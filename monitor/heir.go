package monitor

import (
	"cmp"
	"fmt"
	"slices"

	"tailbell/config"
)

// inheritance is what makes a series count the slots of those in whose place it
// came: before until its slots are the sums of theirs, which follow from them
// and are neither stored nor archived.
type inheritance struct {
	until   int64
	sources []*series
	// taken is when people said so first.
	taken Instant
}

// inherited reports whether the slot is counted elsewhere.
func (s *series) inherited(slot int64) bool { return s.heir != nil && slot < s.heir.until }

// parts are the series whose slots the series sums.
func (s *series) parts() []*series {
	if s.heir != nil {
		return s.heir.sources
	}
	return s.sum.members
}

// unfitHeir says why the series can't take the place of the matched ones; "" if
// it can.
func (e *Engine) unfitHeir(f *fact, matched []*series) (Reason, string) {
	if err := config.CheckSeries(f.Into); err != nil {
		return NotAllowed, fmt.Sprintf("into %q: %v", f.Into, err)
	}
	if f.matches(f.Into) {
		return NotAllowed, fmt.Sprintf("%q is itself one of %q: give what they become a name of its own", f.Into, f.Series)
	}
	ix, other := e.indicatorOf(f.Into)
	into := e.byName[f.Into]
	n := 0
	if into != nil && into.heir != nil {
		n = len(into.heir.sources) // they have merged already, and others join them
	}
	heard := false
	for _, s := range matched {
		if s.sum != nil {
			continue
		}
		n++
		heard = true
		switch {
		case ix != s.indicator || other != nil:
			return NotAllowed, fmt.Sprintf("series %q and %q do not belong to the same indicator", s.name, f.Into)
		case e.succession(ix, f) != ix.firstFrom(f.From):
			return NotAllowed, fmt.Sprintf("series %q took the place of others from %s on: say that date, or give what they become a name of its own",
				f.Into, dateIn(ix.cfg.Zone, ix.cal.Start(e.succession(ix, f))))
		case into != nil && into.heir == nil && into.birth < ix.firstFrom(f.From):
			return NotAllowed, fmt.Sprintf("series %q has counts of its own from before: give what they become a name of its own", f.Into)
		}
	}
	switch {
	case !heard:
		return NoSuchSeries, fmt.Sprintf("no series that was heard of is called %q or matches it", f.Series)
	case f.What == Renamed && n > 1:
		return NotAllowed, fmt.Sprintf("%d series would go on as %q: say merged, not renamed", n, f.Into)
	case ix.cfg.ArrivalLooks:
		return NotAllowed, "looks at events reach to the moment, which is not handed on: close them, and open another"
	case n > 1 && ix.cfg.Exposure == config.Clock:
		return NotAllowed, "exposure by the clock is as large for one series as for two merged ones: close them, and open another"
	case e.partition.Of > 1 && config.PartitionOf(f.Into, e.partition.KeyParts, e.partition.Of) != e.partition.Number:
		return NotAllowed, fmt.Sprintf("series %q belongs to another partition: keep the leading parts of the name", f.Into)
	case into == nil && e.living+len(e.newSums(ix, f.Into)) >= e.setup.Limits.MaxSeries:
		return SeriesFull, fmt.Sprintf("%d series are monitored already: raise limits.max_series", e.setup.Limits.MaxSeries)
	}
	return "", ""
}

// succession is the slot from which on the series that the fact names takes the place of
// others: by the first act that said so and still holds, whether it is monitored at
// present or not.
func (e *Engine) succession(ix *indicator, f *fact) int64 {
	for i := range e.facts {
		if x := &e.facts[i]; x.Into == f.Into {
			return ix.firstFrom(x.From)
		}
	}
	return ix.firstFrom(f.From)
}

// succeedTo lets a series take the place of those that the fact matches, and
// returns what that changes.
func (e *Engine) succeedTo(list []change, f *fact) []change {
	into := e.byName[f.Into]
	if into == nil {
		ix, _ := e.indicatorOf(f.Into)
		into = e.enter(ix, f.Into)
		e.link(into)
	}
	ix := into.indicator
	into.dates = e.datesOf(ix, into.name)
	for i := range e.facts { // this one, and those from before its indicator went
		if e.facts[i].Into == into.name {
			e.inherit(&e.facts[i], into)
		}
	}
	e.touch(into)
	e.inform(into, into.heir.until, ix.looked-1, true, f.why(ix.cal.zone))
	begin := into.birth
	for _, s := range into.heir.sources {
		begin = min(begin, s.birth)
	}
	list = e.changeSum(list, into, begin, into.heir.until-1)
	return e.changeSums(list, into, into.heir.until, ix.looked-1) // it is a member from then on
}

// inherit links a series to those whose place it takes, beside others that it
// may have taken the place of by an act before.
func (e *Engine) inherit(f *fact, into *series) {
	into.indicator.inherits = true
	if into.heir == nil {
		into.heir = &inheritance{until: into.indicator.firstFrom(f.From), taken: f.Taken}
	}
	for _, s := range e.matched(f) {
		if s.sum == nil && s.indicator == into.indicator && !slices.Contains(into.heir.sources, s) {
			into.heir.sources = inserted(into.heir.sources, s)
			s.heirs = append(s.heirs, into)
		}
	}
}

// inheritAgain lets a series take the place of those that it had taken the place of
// before its indicator went: the acts that said so still hold.
func (e *Engine) inheritAgain(into *series) {
	if into.sum != nil {
		return
	}
	for i := range e.facts {
		if f := &e.facts[i]; f.Into == into.name {
			e.inherit(f, into)
		}
	}
	if into.heir == nil {
		return
	}
	for _, s := range into.heir.sources {
		into.birth = min(into.birth, s.birth)
	}
	if ix := into.indicator; into.birth != unborn && ix.started {
		ix.resum(into, into.birth, into.heir.until-1)
		e.inform(into, into.birth, ix.looked-1, true, "")
	}
}

// bequeath links a series that is there again to those that took its place.
func (e *Engine) bequeath(s *series) {
	for i := range e.facts {
		f := &e.facts[i]
		if into := e.byName[f.Into]; f.Into != "" && into != nil && into.heir != nil && s.sum == nil && f.matches(s.name) && into.indicator == s.indicator && !slices.Contains(into.heir.sources, s) {
			into.heir.sources = inserted(into.heir.sources, s)
			s.heirs = append(s.heirs, into)
		}
	}
}

// relinkHeirs links all heirs after they were restored, and sums what they
// inherit: the earlier ones first, of which others may have inherited.
func (e *Engine) relinkHeirs() {
	var heirs []*series
	for i := range e.facts {
		if f := &e.facts[i]; f.Into != "" {
			if into := e.byName[f.Into]; into != nil {
				e.inherit(f, into)
				if !slices.Contains(heirs, into) {
					heirs = append(heirs, into)
				}
			}
		}
	}
	slices.SortStableFunc(heirs, func(a, b *series) int { return cmp.Compare(a.heir.until, b.heir.until) })
	for _, s := range heirs {
		if s.birth != unborn && s.indicator.started {
			s.indicator.resum(s, s.birth, s.heir.until-1)
		}
	}
}

// changeHeirs carries a change of slots into the heirs of a series, and theirs.
func (e *Engine) changeHeirs(list []change, s *series, from, to int64) []change {
	for _, h := range s.heirs {
		to := min(to, h.heir.until-1)
		if from <= to {
			list = e.changeSum(list, h, from, to)
			list = e.changeHeirs(list, h, from, to)
		}
	}
	return list
}

// ownCells are the cells of the series that are its own.
func (s *series) ownCells() cells {
	if s.heir == nil {
		return s.cells
	}
	i, _ := s.cells.find(s.heir.until)
	return s.cells[i:]
}
