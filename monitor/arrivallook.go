package monitor

import (
	"math/big"

	"tailbell/config"
	"tailbell/monitor/arrival"
)

// A look at an arrival tests the span (t-w, t] that ends at the instant t of an
// event, or the last trials up to it, in the upper tail. It is judged by what was in force at t: the stanza,
// the baseline and the limit of the latest boundary that had fallen due. So k
// stays the same from one boundary to the next, and a look that is made again
// finds the k of its own time. It belongs to the boundary that ends the slot of
// t, as far as its alert's span and the horizon go.

// judging is the latest boundary that had fallen due at the moment.
func (ix *indicator) judging(at Instant) int64 {
	b := ix.cal.Slot(at.Add(-ix.cfg.Settle))
	for ix.due(b+1) <= at {
		b++
	}
	for ix.due(b) > at {
		b--
	}
	return b
}

// lookAtArrival tests one window of the series that ends at an instant, at the
// moment when, as judged at a boundary. It is also asked about instants without
// events, to say whether a span still signals.
func (ix *indicator) lookAtArrival(s *series, w arrivalWindow, at Instant, judging int64, when Instant) look {
	l := look{window: w.place, boundary: ix.cal.Slot(at) + 1, occasion: occasion{true, at}, at: when}
	from, full := ix.windowFrom(s, w, at)
	if s.arrivals == nil || !full || !ix.fills(s, w, from, judging, l.boundary) {
		l.status = filling
		return l
	}
	if l.status = s.standing(l.boundary - 1); l.status != made {
		return l
	}
	ix.measureSpan(s, &l, from, at)
	if l.status != made || l.exposure.IsZero() {
		return l
	}
	u, ok := ix.arrivalJudgedBy(s, w.place, judging)
	if !ok {
		l.status = unbased
		return l
	}
	o := ix.spanOpportunity(s, &u, l.exposure, from, at)
	a := s.arrivals
	for len(a.edges) <= w.place {
		a.edges = append(a.edges, nil)
	}
	ix.testUpper(&a.edges[w.place], &l, &u, &o)
	if l.lit[upper] && w.trials > 0 && s.unmatched(from, at) {
		l.status, l.lit[upper], l.log10p[upper] = overfull, false, 0
	}
	return l
}

// countedFrom is the moment from which on the series is counted as a look needs
// it that belongs to a boundary.
func (s *series) countedFrom(ep *epoch, place int, boundary int64) Instant {
	begin := max(ep.begin(s, place), s.begin(boundary))
	if begin == unborn {
		return Never
	}
	return max(s.indicator.cal.Start(begin), s.arrivals.since)
}

// arrivalJudgedBy is judgedBy for looks at arrivals.
func (ix *indicator) arrivalJudgedBy(s *series, window int, boundary int64) (usual, bool) {
	ep := ix.epochAt(boundary)
	u, ok := ix.usualAt(s, ep, boundary)
	u.limit = [2]float64{s.arrivalLimit(ep.cfg, window, boundary)}
	return u, ok
}

// arrivalLimit is the limit on p of a look at an arrival; 0 where it never
// signals.
func (s *series) arrivalLimit(cfg *config.Indicator, window int, boundary int64) float64 {
	if cfg.Allowance == nil {
		return cfg.PLimit
	}
	if l := s.limitsOf(boundary); l != nil && window < len(l.arrival) {
		return l.arrival[window]
	}
	return 0
}

// measureSpan sums what the span (from, to] holds, and says whether it can be
// tested.
func (ix *indicator) measureSpan(s *series, l *look, from, to Instant) {
	c := ix.counted(s, from, to)
	l.events, l.late = c.Events, c.Late
	switch {
	case ix.cfg.Measure == config.Proportion:
		log := &s.arrivals.log
		l.exposure = Quantity{Lo: uint64(log.Span(int64(to), int64(to-from)).Trials)}
		if own := log.At(int64(to)); own.Events > own.Trials || l.events > int64(l.exposure.Lo) {
			l.status = overfull
			return
		}
	case ix.cfg.Exposure == config.Clock:
		l.exposure = ix.clock.between(from, to)
	default:
		lacking := ix.eachPart(s, from, to, func(_ int64, q Quantity, provisional bool) {
			l.exposure = l.exposure.add(q)
			if l.known++; provisional {
				l.provisional++
			}
		})
		if lacking {
			l.status = missing
			return
		}
	}
	if l.events > 0 && l.exposure.IsZero() {
		l.status = unexposed
	}
}

// counted is what counts of the events in the span (from, to]: none from before a
// reset or a change, and none of slots that were out of service. The span keeps
// its exposure all the same: the rule is so many events within w, whatever part
// of it they came in.
func (ix *indicator) counted(s *series, from, to Instant) arrival.Count {
	log := &s.arrivals.log
	if s.dates == nil {
		return log.Span(int64(to), int64(to-from))
	}
	from = ix.cutFrom(s, from, to)
	sum := log.Span(int64(to), int64(to-from))
	for _, out := range s.dates.outs {
		begin, end := max(from, ix.cal.Start(out.from)-1), min(to, ix.cal.Start(out.to)-1)
		if begin < end {
			gone := log.Span(int64(end), int64(end-begin))
			sum.Events -= gone.Events
			sum.Late -= gone.Late
		}
	}
	return sum
}

// cutFrom is the moment after which events in the span (from, to] count: not
// before a reset or a change.
func (ix *indicator) cutFrom(s *series, from, to Instant) Instant {
	if s.dates == nil {
		return from
	}
	for _, c := range s.dates.cuts {
		if start := ix.cal.Start(c.slot); from < start && start <= to && to > c.after {
			from = start - 1 // what comes as the slot begins counts
		}
	}
	return from
}

// eachPart calls use for what the slots that the span (from, to] cuts through
// have of exposure within it, in order. It reports whether any of them lacks
// its exposure.
func (ix *indicator) eachPart(s *series, from, to Instant, use func(slot int64, q Quantity, provisional bool)) (lacking bool) {
	first, last := ix.cal.Slot(from), ix.cal.Slot(to-1)
	within := func(slot int64) (part, whole Instant) {
		start, end := ix.cal.Start(slot), ix.cal.Start(slot+1)
		return min(end, to) - max(start, from), end - start
	}
	if ix.cfg.Exposure == config.Clock {
		for slot := first; slot <= last; slot++ {
			use(slot, ix.clock.between(max(ix.cal.Start(slot), from), min(ix.cal.Start(slot+1), to)), false)
		}
		return false
	}
	next := first // the slot that is to follow
	skip := func(until int64) {
		for ; next < until; next++ {
			if _, whole := within(next); whole > 0 { // a day that a zone skipped lacks nothing
				lacking = true
			}
		}
	}
	ix.eachExposure(s, first, last+1, func(slot int64, q Quantity, provisional bool) {
		skip(slot)
		next = slot + 1
		if part, whole := within(slot); whole > 0 {
			use(slot, q.share(uint64(part), uint64(whole)), provisional)
		}
	})
	skip(last + 1)
	return lacking
}

// share is the part of the quantity that so much of a whole has, rounded down
// to a grain.
func (q Quantity) share(part, whole uint64) Quantity {
	if part == whole {
		return q
	}
	n := new(big.Int).Mul(q.big(), new(big.Int).SetUint64(part))
	n.Quo(n, new(big.Int).SetUint64(whole))
	lo := new(big.Int).And(n, new(big.Int).SetUint64(1<<64-1))
	return Quantity{new(big.Int).Rsh(n, 64).Uint64(), lo.Uint64()}
}

// spanOpportunity weighs the exposure of the span (from, to]: where there are
// strata, that of each slot by its own.
func (ix *indicator) spanOpportunity(s *series, u *usual, exposure Quantity, from, to Instant) opportunity {
	digits := u.cfg.GrainDigits
	o := opportunity{exposure: exposure.Float(digits)}
	o.weighted = o.exposure
	strata := u.base.Strata
	if strata == nil {
		return o
	}
	sums := make([]Quantity, len(strata.Factors))
	ix.eachPart(s, from, to, func(slot int64, q Quantity, _ bool) {
		i := ix.stratum(strata, slot)
		sums[i] = sums[i].add(q)
	})
	o.weighted = 0
	for i, q := range sums {
		if !q.IsZero() {
			o.weighted += float64(strata.Factors[i] * q.Float(digits))
		}
	}
	return o
}
