package monitor

import (
	"crypto/sha256"
	"encoding/binary"
	"fmt"
	"slices"
	"strings"
	"time"

	"tailbell/config"
)

// refresh counts the references of the indicator's series anew where a new
// period of their baseline begins with the boundary. What is counted is what
// the data say then; later corrections of the past reach the next period.
func (e *Engine) refresh(ix *indicator, ep *epoch, boundary int64) {
	if !estimated(ep.cfg) {
		return
	}
	var pools map[poolKey]*pool
	for _, s := range ix.series {
		b := ix.baseline(s, ep.cfg, boundary)
		if b == nil || (b.Kind != config.Trailing && b.Kind != config.Peers) || s.birth >= boundary {
			continue
		}
		if b.Kind == config.Peers && ix.pooled() {
			e.takePool(ix, s, ep, b, boundary)
			continue
		}
		period, of := NewCalendar(b.Refresh, ix.cal.zone).Slot(ix.cal.Start(boundary)), ix.digest(b)
		if n := len(s.references); n > 0 && s.references[n-1].period == period && s.references[n-1].of == of {
			continue
		}
		var r reference
		if b.Kind == config.Trailing {
			r.end = boundary - int64(b.GapSlots)
			r.begin = r.end - int64(b.SpanSlots)
			ix.countReference(s, b, &r, boundary)
		} else {
			if pools == nil {
				pools = map[poolKey]*pool{}
			}
			key := poolKey{b, s.ruleOf()}
			p := pools[key]
			if p == nil {
				p = ix.poolOf(ep, key, boundary)
				pools[key] = p
			}
			r = p.without(s, b, ix.cfg)
		}
		r.from, r.period, r.of, r.strata = boundary, period, of, nil
		s.references = append(s.references, r)
		if s.comparator == nil && b.Kind == config.Trailing && r.events >= b.MinEvents && r.weighted > 0 {
			s.comparator = &r
		}
		e.touch(s)
	}
}

// digest tells apart how references are counted: where the baseline changes in
// that, another one is counted at once.
func (ix *indicator) digest(b *config.Baseline) int64 {
	if d, ok := ix.digests[b]; ok {
		return d
	}
	text := fmt.Append(nil, b.Kind, b.SpanSlots, b.GapSlots, b.Refresh)
	if b.Strata != nil {
		text = fmt.Append(text, b.Strata.By, b.Strata.Factors)
	}
	if b.Delay != nil {
		text = fmt.Append(text, b.Delay.Ages, b.Delay.Reported)
	}
	sum := sha256.Sum256(text)
	d := int64(binary.LittleEndian.Uint64(sum[:]))
	ix.digests[b] = d
	return d
}

func estimated(cfg *config.Indicator) bool {
	return slices.ContainsFunc(cfg.Baselines, func(b config.Baseline) bool {
		return b.Kind == config.Trailing || b.Kind == config.Peers
	})
}

// countReference sums, for looks at the boundary, the slots [begin, end) of the
// series that are known (or
// provisional) and were not marked real.
func (ix *indicator) countReference(s *series, b *config.Baseline, r *reference, boundary int64) {
	r.begin = max(r.begin, s.birth, ix.kept)
	r.strata = make([]Quantity, strataOf(b))
	at := ix.due(boundary)
	ix.eachExposure(s, r.begin, r.end, func(slot int64, q Quantity, _ bool) {
		events, known := ix.eventsOf(s, slot)
		switch {
		case !known:
		case s.isMarked(slot):
			r.leftOut++
		default:
			r.events += events
			i := ix.cellOf(b, slot, at)
			r.strata[i] = r.strata[i].add(q)
		}
	})
	r.weigh(b, ix.cfg)
}

// strataOf is how many kinds of slots a reference tells apart: by stratum and
// by the step of the delay that they have reached.
func strataOf(b *config.Baseline) int {
	n := 1
	if b.Strata != nil {
		n = len(b.Strata.Factors)
	}
	if b.Delay != nil {
		n *= len(b.Delay.Ages) + 1
	}
	return n
}

// cellOf returns the number of the slot's kind at the moment.
func (ix *indicator) cellOf(b *config.Baseline, slot int64, at Instant) int {
	i := 0
	if b.Strata != nil {
		i = ix.stratum(b.Strata, slot)
	}
	if b.Delay == nil {
		return i
	}
	age := at.Time().Sub(ix.cal.Start(slot + 1).Time())
	steps := slices.IndexFunc(b.Delay.Ages, func(a time.Duration) bool { return a > age })
	if steps < 0 {
		steps = len(b.Delay.Ages)
	}
	return i*(len(b.Delay.Ages)+1) + steps
}

// factorOf is by how much the usual rate is multiplied in slots of that kind.
func factorOf(b *config.Baseline, i int) float64 {
	share, factor := 1.0, 1.0
	if b.Delay != nil {
		steps := len(b.Delay.Ages) + 1
		if share = 0; i%steps > 0 {
			share = b.Delay.Reported[i%steps-1]
		}
		i /= steps
	}
	if b.Strata != nil {
		factor = b.Strata.Factors[i]
	}
	return factor * share
}

// weigh sums the exposure of all kinds, plain and by their factors. For a
// proportion, whose factors multiply the odds, it comes to so many trials as
// would bring these events at the usual proportion itself.
func (r *reference) weigh(b *config.Baseline, cfg *config.Indicator) {
	r.exposure, r.weighted = Quantity{}, 0
	var list []trials
	for i, q := range r.strata {
		r.exposure = r.exposure.add(q)
		factor := factorOf(b, i)
		if !q.IsZero() {
			r.weighted += float64(factor * q.Float(cfg.GrainDigits))
		}
		if n, ok := q.Int64(); ok && n > 0 {
			list = append(list, trials{n, factor})
		}
	}
	if cfg.Measure == config.Proportion && b.Strata != nil && len(list) > 0 {
		events := within(r.events, r.exposure.Float(cfg.GrainDigits))
		r.weighted = events / usualOf(events, list)
	}
}

// usualOf returns the usual proportion at which the trials, each with its
// factor of the odds, bring so many events on average.
func usualOf(events float64, list []trials) float64 {
	lo, hi := 0.0, 1.0
	for {
		theta := lo + (hi-lo)/2
		if theta == lo || theta == hi {
			return theta
		}
		if mean(list, theta) < events {
			lo = theta
		} else {
			hi = theta
		}
	}
}

// mean is how many events the trials bring on average at the usual proportion.
func mean(list []trials, usual float64) float64 {
	sum := 0.0
	for _, t := range list {
		sum += float64(float64(t.n) * timesOdds(usual, t.factor))
	}
	return sum
}

// eventsOf returns the slot's events, and whether they are known.
func (ix *indicator) eventsOf(s *series, slot int64) (int64, bool) {
	i, ok := s.cells.find(slot)
	if !ok {
		return 0, !s.needs().events
	}
	return s.cells[i].events, !s.needs().events || s.cells[i].saysEvents > 0
}

// isMarked reports whether the slot lies in a span that was marked real.
func (s *series) isMarked(slot int64) bool {
	return slices.ContainsFunc(s.marked, func(m markedSpan) bool { return m.from <= slot && slot < m.to })
}

// pool is what all series under one baseline counted over its span.
type pool struct {
	each map[*series]*reference
	sum  reference
	// index is the sum of events squared over exposure.
	index float64
}

// poolKey tells pools apart: sums have other sums for peers.
type poolKey struct {
	base *config.Baseline
	rule int
}

func (ix *indicator) poolOf(ep *epoch, key poolKey, boundary int64) *pool {
	b := key.base
	p := &pool{each: map[*series]*reference{}}
	p.sum.strata = make([]Quantity, strataOf(b))
	p.sum.begin, p.sum.end = boundary-int64(b.SpanSlots), boundary
	for _, s := range ix.inOrder() {
		if s.ruleOf() != key.rule || ix.baseline(s, ep.cfg, boundary) != b {
			continue
		}
		r := &reference{begin: p.sum.begin, end: p.sum.end}
		if ix.countReference(s, b, r, boundary); r.weighted == 0 {
			continue
		}
		p.each[s] = r
		p.sum.events += r.events
		p.sum.leftOut += r.leftOut
		for i := range r.strata {
			p.sum.strata[i] = p.sum.strata[i].add(r.strata[i])
		}
		p.index += r.index()
	}
	return p
}

// inOrder returns the series in an order that does not depend on partitions: that
// of gathered sums' names, whose numbers do.
func (ix *indicator) inOrder() []*series {
	if ix.of == nil {
		return ix.ordered()
	}
	list := slices.Clone(ix.series)
	slices.SortFunc(list, func(a, b *series) int { return strings.Compare(a.name, b.name) })
	return list
}

func (r *reference) index() float64 {
	return float64(float64(r.events) * float64(r.events) / r.weighted)
}

// without returns the reference of one series: all the others, and how much
// they differ among themselves.
func (p *pool) without(s *series, b *config.Baseline, cfg *config.Indicator) reference {
	r := p.sum
	r.strata = slices.Clone(p.sum.strata)
	r.peers = int64(len(p.each))
	index := p.index
	if own := p.each[s]; own != nil {
		r.peers--
		r.events -= own.events
		r.leftOut -= own.leftOut
		for i := range own.strata {
			r.strata[i] = r.strata[i].sub(own.strata[i])
		}
		index -= own.index()
	}
	r.weigh(b, cfg)
	r.differ(index)
	return r
}

// differ reckons how much peers differ, from the sum of their events squared over
// exposure.
func (r *reference) differ(index float64) {
	if r.peers >= 2 && r.events > 0 {
		// The dispersion index: sum of (x - mean)^2 / mean over the others,
		// by their number less one.
		rate := float64(r.events) / r.weighted
		r.between = max(0, float64(index/rate)-float64(r.events)) / float64(r.peers-1)
	}
}

// forgetReferences drops the estimates that no look inside the horizon needs.
func (s *series) forgetReferences(frozen int64) {
	n := 0
	for n+1 < len(s.references) && s.references[n+1].from <= frozen {
		n++
	}
	s.references = slices.Delete(s.references, 0, n)
}
