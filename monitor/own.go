package monitor

import (
	"encoding/binary"
	"slices"
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
