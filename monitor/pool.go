package monitor

import (
	"crypto/sha256"
	"encoding/binary"
	"fmt"
	"math/big"
	"slices"

	"tailbell/config"
)

// poolCount is what the series under one baseline of peers counted together, over
// the span that ends with a boundary.
type poolCount struct {
	// ID is that of the pool, see poolID, and Period the number of the refresh
	// period for which it is counted; Counted the boundary at which it was, once it
	// is in force.
	ID      int64 `json:"id"`
	Period  int64 `json:"period"`
	Counted int64 `json:"counted,omitempty"`
	// Enough is how many events it must hold.
	Enough  int64 `json:"enough"`
	Units   int64 `json:"units"`
	Events  int64 `json:"events"`
	LeftOut int64 `json:"left_out,omitempty"`
	// Index is the sum of events squared over exposure, in fixed point.
	Index *big.Int `json:"index"`
	// Strata is the exposure by kind of slot, see cellOf.
	Strata []Quantity `json:"strata"`
}

// serves reports whether the pool is good for its period: as long as it holds too few
// events, or a single series, it is counted anew each day.
func (p *poolCount) serves() bool { return p.Units > 1 && p.Events >= p.Enough }

// with adds what another partition counted.
func (p *poolCount) with(more *poolCount) *poolCount {
	if p == nil {
		x := *more
		x.Index, x.Strata = new(big.Int).Set(more.Index), slices.Clone(more.Strata)
		return &x
	}
	if p.Period != more.Period || p.Enough != more.Enough || len(p.Strata) != len(more.Strata) {
		p.Units = 0 // it can't be: it is no pool
		return p
	}
	p.Units += more.Units
	p.Events += more.Events
	p.LeftOut += more.LeftOut
	p.Index.Add(p.Index, more.Index)
	for i, q := range more.Strata {
		p.Strata[i] = p.Strata[i].add(q)
	}
	return p
}

// poolID tells pools apart: by how they are counted, and by which series belong to
// them.
func (ix *indicator) poolID(cfg *config.Indicator, key poolKey) int64 {
	if id, ok := ix.poolIDs[key]; ok {
		return id
	}
	text := fmt.Append(nil, ix.digest(key.base), '\n')
	if key.rule >= 0 {
		text = fmt.Append(text, cfg.Sums[key.rule])
	}
	for i := range cfg.Baselines { // the first that serves a series is its own
		b := &cfg.Baselines[i]
		text = fmt.Append(text, '\n', b.Series, '\n', b.Sums, '\n', b.From.UnixMicro(), '\n', b.To.UnixMicro())
		if b == key.base {
			break
		}
	}
	sum := sha256.Sum256(text)
	if ix.poolIDs == nil {
		ix.poolIDs = map[poolKey]int64{}
	}
	id := int64(binary.LittleEndian.Uint64(sum[:]))
	ix.poolIDs[key] = id
	return id
}

// countPools counts the pools that are not in force yet for the refresh period of
// the day after the boundary, from the data as they stand. A series belongs to
// the pool of the baseline that will serve it then.
func (e *Engine) countPools(ix *indicator, ep *epoch, boundary int64) []poolCount {
	next := ix.dayAfter(boundary)
	wanted, all := map[poolKey]int{}, map[int64]bool{}
	var list []poolCount
	for i := range ep.cfg.Baselines {
		b := &ep.cfg.Baselines[i]
		if b.Kind != config.Peers {
			continue
		}
		period := NewCalendar(b.Refresh, ix.cal.zone).Slot(ix.cal.Start(next))
		for rule := -1; rule < len(ep.cfg.Sums); rule++ {
			if rule >= 0 && ep.cfg.Sums[rule].Gathered(e.partition.KeyParts) {
				continue // they are all in one partition
			}
			key := poolKey{b, rule}
			id := ix.poolID(ep.cfg, key)
			all[id] = true
			if p := ix.agreed.Pools[id]; p != nil && p.Period == period && p.serves() {
				continue
			}
			wanted[key] = len(list)
			list = append(list, poolCount{ID: id, Period: period, Enough: b.MinEvents, Index: new(big.Int), Strata: make([]Quantity, strataOf(b))})
		}
	}
	ix.forgetPools(all)
	if len(list) == 0 {
		return nil
	}
	for _, s := range ix.series {
		b := ix.baseline(s, ep.cfg, next)
		if b == nil || b.Kind != config.Peers {
			continue
		}
		n, ok := wanted[poolKey{b, s.ruleOf()}]
		if !ok {
			continue
		}
		r := &reference{begin: boundary - int64(b.SpanSlots), end: boundary}
		if ix.countReference(s, b, r, boundary); r.weighted == 0 {
			continue
		}
		list[n].count(r)
		e.keepTally(s, poolTally{list[n].ID, boundary, r.events, r.leftOut, r.strata})
	}
	return list
}

// count adds one series.
func (p *poolCount) count(r *reference) {
	p.Units++
	p.Events += r.events
	p.LeftOut += r.leftOut
	p.Index.Add(p.Index, fixed(r.index()))
	for i, q := range r.strata {
		p.Strata[i] = p.Strata[i].add(q)
	}
}

// pooled reports whether peers are counted by all partitions, day by day. Gathered
// sums are all in one.
func (ix *indicator) pooled() bool { return ix.counting != nil && ix.of == nil }

// takePool takes the pool that is in force as the reference of the series from the
// boundary on, unless it has it.
func (e *Engine) takePool(ix *indicator, s *series, ep *epoch, b *config.Baseline, boundary int64) {
	id := ix.poolID(ep.cfg, poolKey{b, s.ruleOf()})
	p := ix.agreed.Pools[id]
	if p == nil || len(p.Strata) != strataOf(b) {
		return
	}
	if n := len(s.references); n > 0 && s.references[n-1].of == id && s.references[n-1].end == p.Counted {
		return
	}
	r := p.without(s, b, ix.cfg)
	r.from, r.strata = boundary, nil
	s.references = append(s.references, r)
	e.touch(s)
}

// without returns the reference of one series: all the others of the pool, and how
// much they differ among themselves.
func (p *poolCount) without(s *series, b *config.Baseline, cfg *config.Indicator) reference {
	r := reference{
		period: p.Period, of: p.ID, begin: p.Counted - int64(b.SpanSlots), end: p.Counted,
		events: p.Events, leftOut: p.LeftOut, peers: p.Units, strata: slices.Clone(p.Strata),
	}
	index := p.Index
	if t := s.tallyOf(p.ID, p.Counted); t != nil {
		mine := reference{events: t.events, strata: t.strata}
		mine.weigh(b, cfg)
		r.peers--
		r.events -= t.events
		r.leftOut -= t.leftOut
		for i := range t.strata {
			r.strata[i] = r.strata[i].sub(t.strata[i])
		}
		index = new(big.Int).Sub(index, fixed(mine.index()))
	}
	r.weigh(b, cfg)
	r.differ(unfixed(index))
	return r
}

// awaitsCount reports whether the series is judged by peers of which no count is in
// force yet.
func (ix *indicator) awaitsCount(s *series) bool {
	ep := ix.now()
	b := ix.baseline(s, ep.cfg, ix.looked)
	return ix.pooled() && b != nil && b.Kind == config.Peers && ix.agreed.Pools[ix.poolID(ep.cfg, poolKey{b, s.ruleOf()})] == nil
}

// servedBy reports whether the reference was counted for the baseline: one of
// another set-up serves no longer where it takes days to count another.
func (ix *indicator) servedBy(s *series, ep *epoch, b *config.Baseline, r *reference) bool {
	return !ix.pooled() || r.of == ix.poolID(ep.cfg, poolKey{b, s.ruleOf()}) || r.of == ix.digest(b)
}
