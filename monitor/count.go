package monitor

import (
	"crypto/sha256"
	"encoding/binary"
	"fmt"
	"math"
	"math/big"
	"slices"

	"tailbell/config"
)

// own is what a series had a part in of what its partition told: so it can be
// left out of its own peers, and has a share of an allowance if it was counted.
type own struct {
	// since is the first boundary at which it was counted.
	since   int64
	tallies []poolTally
}

// poolTally is what the series itself counted for a pool.
type poolTally struct {
	pool, at        int64
	events, leftOut int64
	strata          []Quantity
}

// counts reports whether a day's counts are taken at the boundary.
func (ix *indicator) counts(boundary int64) bool {
	return ix.counting != nil && ix.dayBegins(boundary) == boundary
}

// beginCounts tells what there is when the counting of an indicator begins, or
// when boundaries were skipped since there was nothing to look at: as of the first
// boundary of the present day.
func (e *Engine) beginCounts(ix *indicator) {
	if ix.counting == nil {
		return
	}
	l, sums := e.ownLane(ix)
	boundary := ix.dayBegins(ix.looked)
	switch {
	case !l.Begun:
		e.countAll(ix, ix.epochAt(boundary), boundary)
	case boundary > l.Through:
		e.tellCount(ix.counting, &Summary{after: l.Through, through: boundary, count: &count{Nothing: true, Sums: sums}})
	}
	e.inForce(ix)
	e.reheld()
}

// forgetNothing notes that what was told has been handed over.
func (e *Engine) forgetNothing() {
	for _, k := range e.countings {
		k.nothing = [2]*Summary{}
	}
}

// countAt counts the series of the indicator at the first boundary of a day, when
// its looks fall due.
func (e *Engine) countAt(ix *indicator, ep *epoch, boundary int64) {
	if ix.counts(boundary) {
		e.countAll(ix, ep, boundary)
		e.reheld()
	}
}

func (e *Engine) countAll(ix *indicator, ep *epoch, boundary int64) {
	l, sums := e.ownLane(ix)
	s := &Summary{begins: !l.Begun, after: never, through: boundary}
	if l.Begun {
		s.after = l.Through
	}
	if l.Begun && boundary <= l.Through {
		return // a start in between
	}
	x := &count{Sums: sums, Predicted: new(big.Int)}
	alike := map[*solution]int64{}
	for _, m := range ix.series {
		if m.birth < boundary {
			x.Series++
			if m.own == nil || m.own.since == maxBoundary {
				m.attended().since = boundary
				e.touch(m)
			}
		}
		if len(m.limits) > 0 && m.limits[0].from <= boundary {
			x.Limited++
			alike[m.limitsOf(boundary).solution]++
		}
	}
	for l, n := range alike { // in any order: the sums are exact
		x.Predicted.Add(x.Predicted, new(big.Int).Mul(fixed(l.here), big.NewInt(n)))
	}
	if !sums {
		x.Pools = e.countPools(ix, ep, boundary)
	}
	x.Nothing = len(ix.series) == 0
	s.count = x
	e.tellCount(ix.counting, s)
}

// fixedBits is how many bits of a fraction are told.
const fixedBits = 40

// fixed is the number in fixed point, rounded once: sums of such do not depend on
// their order.
func fixed(x float64) *big.Int {
	if math.IsNaN(x) || math.IsInf(x, 0) {
		return new(big.Int) // out of nothing
	}
	f := new(big.Float).SetPrec(53).SetFloat64(x)
	f.SetMantExp(f, fixedBits)
	n, accuracy := f.Int(nil)
	if accuracy == big.Exact {
		return n
	}
	rest := new(big.Float).SetPrec(200).Sub(f, new(big.Float).SetPrec(200).SetInt(n))
	if rest.Cmp(big.NewFloat(0.5)) >= 0 { // what is told is never negative
		n.Add(n, big.NewInt(1))
	}
	return n
}

// unfixed is the number nearest to one in fixed point.
func unfixed(n *big.Int) float64 {
	if n == nil {
		return 0
	}
	f := new(big.Float).SetPrec(uint(max(64, n.BitLen()))).SetInt(n)
	x, _ := f.SetMantExp(f, -fixedBits).Float64()
	return x
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

// keepTally keeps what the series counted for a pool, and of older ones those that
// are in force, or may come into it.
func (e *Engine) keepTally(s *series, t poolTally) {
	in := &s.indicator.agreed
	own := s.attended()
	own.tallies = slices.DeleteFunc(own.tallies, func(old poolTally) bool {
		p := in.Pools[old.pool]
		return old.at <= in.Through && (p == nil || p.Counted != old.at)
	})
	own.tallies = append(own.tallies, t)
	e.touch(s)
}

// attended returns what the series has a part in, made if need be.
func (s *series) attended() *own {
	if s.own == nil {
		s.own = &own{since: maxBoundary}
	}
	return s.own
}

// tallyOf returns what the series counted for a pool at a boundary, nil for
// nothing.
func (s *series) tallyOf(pool, at int64) *poolTally {
	if s.own == nil {
		return nil
	}
	for i := range s.own.tallies {
		if t := &s.own.tallies[i]; t.pool == pool && t.at == at {
			return t
		}
	}
	return nil
}

// isCounted reports whether the series is among those counted that are in force.
func (ix *indicator) isCounted(s *series) bool {
	return s.own != nil && s.own.since <= ix.agreed.Through
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

func (s *series) encodeOwn(b []byte) []byte {
	b = binary.AppendVarint(b, s.own.since)
	b = binary.AppendUvarint(b, uint64(len(s.own.tallies)))
	for i := range s.own.tallies {
		t := &s.own.tallies[i]
		b = binary.AppendVarint(binary.AppendVarint(b, t.pool), t.at)
		b = binary.AppendVarint(binary.AppendVarint(b, t.events), t.leftOut)
		b = appendQuantities(b, t.strata)
	}
	return b
}

func (r *reader) own() *own {
	o := &own{since: r.int()}
	for range r.length() {
		o.tallies = append(o.tallies, poolTally{r.int(), r.int(), r.int(), r.int(), r.quantities(mostKinds)})
	}
	return o
}

// appendQuantities writes a list of which most may be none: the others are written
// by their places.
func appendQuantities(b []byte, list []Quantity) []byte {
	b = binary.AppendUvarint(b, uint64(len(list)))
	n := 0
	for _, q := range list {
		if !q.IsZero() {
			n++
		}
	}
	b = binary.AppendUvarint(b, uint64(n))
	for i, q := range list {
		if !q.IsZero() {
			b = binary.AppendUvarint(b, uint64(i))
			b = binary.AppendUvarint(binary.AppendUvarint(b, q.Hi), q.Lo)
		}
	}
	return b
}

// mostKinds is the most kinds of slot that a reference tells apart: hours of the
// week, by the steps of a delay. A message tells of no more.
const mostKinds = 1 << 18

func (r *reader) quantities(most int) []Quantity {
	n := r.uint()
	if n > uint64(most) {
		r.fail("a list is too long")
		return nil
	}
	list := make([]Quantity, n)
	for range r.length() {
		i := r.uint()
		if i >= n {
			r.fail("a place is none")
			return nil
		}
		list[i] = r.quantity()
	}
	return list
}
