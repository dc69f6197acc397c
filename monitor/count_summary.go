package monitor

import (
	"encoding/binary"
	"math/big"
)

// countVersion is the version of summaries that tell what a partition counted.
const countVersion = 2

const (
	countNothing = 8
	countSums    = 16
)

// mostDigits is the most bytes of a number in fixed point: that of the greatest
// floating-point number takes fewer.
const mostDigits = 160

// countParts cuts a count into messages: its pools may be many.
func (s *Summary) countParts() []Summary {
	var parts []Summary
	next, size := *s, 0
	x := *s.count
	x.Pools = nil
	for i := range s.count.Pools {
		p := &s.count.Pools[i]
		n := 48 + 24*len(p.Strata)
		if size > 0 && size+n > summaryBytes {
			next.count, next.more = new(count), true
			*next.count = x
			parts = append(parts, next)
			next, size = *s, 0
			next.part = len(parts)
			x = count{Sums: s.count.Sums}
		}
		x.Pools, size = append(x.Pools, *p), size+n
	}
	next.count = &x
	return append(parts, next)
}

// encodeCount writes what was counted: as encode does, with the numbers and pools
// in place of rows.
func (s *Summary) encodeCount() []byte {
	x := s.count
	b := []byte{countVersion, flag(s.begins) | flag(s.ends)<<1 | flag(s.more)<<2 | flag(x.Nothing)<<3 | flag(x.Sums)<<4}
	b = s.encodeHead(b)
	b = binary.AppendUvarint(b, uint64(x.Series))
	b = binary.AppendUvarint(b, uint64(x.Limited))
	b = appendBig(b, x.Predicted)
	b = binary.AppendUvarint(b, uint64(len(x.Pools)))
	for i := range x.Pools {
		p := &x.Pools[i]
		b = binary.AppendVarint(binary.AppendVarint(b, p.ID), p.Period)
		b = binary.AppendUvarint(b, uint64(p.Enough))
		b = binary.AppendUvarint(b, uint64(p.Units))
		b = binary.AppendUvarint(b, uint64(p.Events))
		b = binary.AppendUvarint(b, uint64(p.LeftOut))
		b = appendBig(b, p.Index)
		b = appendQuantities(b, p.Strata)
	}
	return b
}

func appendBig(b []byte, n *big.Int) []byte {
	if n == nil {
		return binary.AppendUvarint(b, 0)
	}
	return appendString(b, string(n.Bytes()))
}

func (r *reader) big() *big.Int {
	b := r.bytes()
	if len(b) > mostDigits {
		r.fail("a number is too long")
		return new(big.Int)
	}
	return new(big.Int).SetBytes(b)
}

// number reads one that is not negative.
func (r *reader) number() int64 {
	n := r.uint()
	if n > 1<<56 {
		r.fail("a number is too large")
		return 0
	}
	return int64(n)
}

// count reads what encodeCount wrote after the head.
func (r *reader) count(bits byte) *count {
	x := &count{Nothing: bits&countNothing != 0, Sums: bits&countSums != 0}
	x.Series, x.Limited, x.Predicted = r.number(), r.number(), r.big()
	kinds := mostKinds
	for range r.length() {
		p := poolCount{
			ID: r.int(), Period: r.int(), Enough: r.number(), Units: r.number(), Events: r.number(), LeftOut: r.number(),
			Index: r.big(), Strata: r.quantities(kinds),
		}
		kinds -= len(p.Strata)
		x.Pools = append(x.Pools, p)
	}
	if x.Nothing && (x.Series > 0 || x.Limited > 0) {
		r.fail("it says that there is nothing, and counts")
	}
	return x
}
