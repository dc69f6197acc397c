package monitor

import (
	"tailbell/config"
)

// opportunity is the exposure of a window as a look takes it.
type opportunity struct {
	// exposure is what was counted, and weighted what it comes to when each
	// slot is multiplied by the factor of its stratum and by the share of its
	// events that can have been reported.
	exposure, weighted float64
	// trials are those of a proportion, together where they are alike.
	trials []trials
}

// trials are so many trials with the same factor of the odds.
type trials struct {
	n      int64
	factor float64
}

// opportunity weighs the exposure of the slots [from, to) for a look that is
// made at the moment at.
func (ix *indicator) opportunity(s *series, u *usual, t *tally, from, to int64, at Instant) opportunity {
	digits := u.cfg.GrainDigits
	o := opportunity{exposure: t.exposure.Float(digits)}
	o.weighted = o.exposure
	b := u.base
	proportion := u.cfg.Measure == config.Proportion
	switch {
	case proportion && (b.Strata != nil || b.Spread > 1):
		o.trials = ix.trialsOf(s, b, from, to)
	case proportion || (b.Strata == nil && b.Delay == nil):
	case b.Delay == nil:
		o.weighted = ix.stratified(s, b.Strata, digits, from, to)
	default:
		o.weighted = ix.thinned(s, b, digits, from, to, at)
	}
	return o
}

// stratified sums the exposure of each stratum exactly, so that the order of
// nothing matters but that of the strata.
func (ix *indicator) stratified(s *series, strata *config.Strata, digits int, from, to int64) float64 {
	sums := make([]Quantity, len(strata.Factors))
	ix.eachExposure(s, from, to, func(slot int64, q Quantity, _ bool) {
		i := ix.stratum(strata, slot)
		sums[i] = sums[i].add(q)
	})
	weighted := 0.0
	for i, q := range sums {
		if !q.IsZero() {
			weighted += float64(strata.Factors[i] * q.Float(digits))
		}
	}
	return weighted
}

// thinned sums in the order of the slots, each by its stratum and its age.
func (ix *indicator) thinned(s *series, b *config.Baseline, digits int, from, to int64, at Instant) float64 {
	weighted := 0.0
	ix.eachExposure(s, from, to, func(slot int64, q Quantity, _ bool) {
		age := at.Time().Sub(ix.cal.Start(slot + 1).Time())
		weighted += float64(ix.factor(b.Strata, slot) * b.Delay.At(age) * q.Float(digits))
	})
	return weighted
}

// trialsOf lists the trials by stratum, or slot by slot where they are spread.
func (ix *indicator) trialsOf(s *series, b *config.Baseline, from, to int64) []trials {
	var list []trials
	if b.Spread > 1 {
		ix.eachExposure(s, from, to, func(slot int64, q Quantity, _ bool) {
			if n, ok := q.Int64(); ok && n > 0 {
				list = append(list, trials{n, ix.factor(b.Strata, slot)})
			}
		})
		return list
	}
	sums := make([]int64, len(b.Strata.Factors))
	ix.eachExposure(s, from, to, func(slot int64, q Quantity, _ bool) {
		if n, ok := q.Int64(); ok {
			sums[ix.stratum(b.Strata, slot)] += n
		}
	})
	for i, n := range sums {
		if n > 0 {
			list = append(list, trials{n, b.Strata.Factors[i]})
		}
	}
	return list
}

func (ix *indicator) factor(strata *config.Strata, slot int64) float64 {
	if strata == nil {
		return 1
	}
	return strata.Factors[ix.stratum(strata, slot)]
}

// stratum returns the stratum in which the slot begins, from 0.
func (ix *indicator) stratum(strata *config.Strata, slot int64) int {
	return strata.Index(ix.cal.Start(slot).Time().In(ix.cal.zone))
}

// eachExposure calls use for the slots in [from, to) that have an exposure, in
// order, with whether it is provisional: carried forward from an earlier slot.
func (ix *indicator) eachExposure(s *series, from, to int64, use func(slot int64, q Quantity, provisional bool)) {
	if s.dates != nil && s.dates.outs.touch(from, to) {
		all := use
		use = func(slot int64, q Quantity, provisional bool) {
			if !s.dates.isOut(slot) {
				all(slot, q, provisional)
			}
		}
	}
	switch s.exposureFrom() {
	case config.Clock:
		for slot := from; slot < to; slot++ {
			use(slot, ix.clock.between(ix.cal.Start(slot), ix.cal.Start(slot+1)), false)
		}
	case config.Census:
		ix.carry(s, from, to, use)
	case config.Reported:
		inside := s.cells.between(from, to)
		for i := range inside {
			if c := &inside[i]; c.saysExposure > 0 {
				use(c.slot, c.exposure, c.provisional)
			}
		}
	}
}

// carry walks the slots of a census: each has the level that was last
// reported for it or before it, as long as that has not expired.
func (ix *indicator) carry(s *series, from, to int64, use func(slot int64, q Quantity, provisional bool)) {
	next, _ := s.cells.find(from)
	last := next - 1
	for last >= 0 && s.cells[last].saysExposure == 0 {
		last--
	}
	for slot := from; slot < to; slot++ {
		if next < len(s.cells) && s.cells[next].slot == slot {
			if s.cells[next].saysExposure > 0 {
				last = next
			}
			next++
		}
		if last < 0 {
			continue
		}
		c := &s.cells[last]
		if c.slot == slot || ix.carries(c.slot, slot) {
			use(slot, c.exposure, c.slot != slot)
		}
	}
}

// carries reports whether a level of one slot still holds in a later one.
func (ix *indicator) carries(level, slot int64) bool {
	return ix.cal.Start(slot+1) <= ix.cal.Start(level+1).Add(ix.cfg.CensusExpiry)
}
