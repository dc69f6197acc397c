package monitor

import (
	"math/big"
	"math/bits"
	"strconv"

	"tailbell/config"
)

// Quantity is an exact amount of exposure in grains: a fixed-point integer of
// 128 bits, never negative. Sums of quantities don't depend on their order.
type Quantity struct{ Hi, Lo uint64 }

// quantityOf returns d in grains of 10^-digits, and false if d is finer than
// a grain or at or beyond 2^63 grains.
func quantityOf(d config.Decimal, digits int) (Quantity, Reason) {
	n := digits - int(d.Digits)
	if n < 0 {
		return Quantity{}, FinerThanGrain
	}
	lo := d.Coef
	for range n {
		hi, next := bits.Mul64(lo, 10)
		if hi != 0 {
			return Quantity{}, TooBig
		}
		lo = next
	}
	if lo>>63 != 0 {
		return Quantity{}, TooBig
	}
	return Quantity{Lo: lo}, ""
}

func (q Quantity) add(r Quantity) Quantity {
	lo, carry := bits.Add64(q.Lo, r.Lo, 0)
	hi, _ := bits.Add64(q.Hi, r.Hi, carry)
	return Quantity{hi, lo}
}

func (q Quantity) sub(r Quantity) Quantity {
	lo, borrow := bits.Sub64(q.Lo, r.Lo, 0)
	hi, _ := bits.Sub64(q.Hi, r.Hi, borrow)
	return Quantity{hi, lo}
}

// signed adds r (sign 1) or takes it away (sign -1).
func (q Quantity) signed(r Quantity, sign int) Quantity {
	if sign < 0 {
		return q.sub(r)
	}
	return q.add(r)
}

// IsZero reports whether there is no exposure at all.
func (q Quantity) IsZero() bool { return q.Hi == 0 && q.Lo == 0 }

var pow10 = [...]float64{1, 1e1, 1e2, 1e3, 1e4, 1e5, 1e6, 1e7, 1e8, 1e9}

// Float returns the amount in units of exposure, for grains of 10^-digits
// (digits 0 to 9), correctly rounded.
func (q Quantity) Float(digits int) float64 {
	if q.Hi == 0 && q.Lo < 1<<53 {
		return float64(q.Lo) / pow10[digits]
	}
	return q.scaled(digits)
}

// scaled is Float for any number of digits, by way of exact rationals.
func (q Quantity) scaled(digits int) float64 {
	scale := new(big.Int).Exp(big.NewInt(10), big.NewInt(int64(digits)), nil)
	f, _ := new(big.Rat).SetFrac(q.big(), scale).Float64()
	return f
}

// Int64 returns the number of grains, and false if it does not fit.
func (q Quantity) Int64() (int64, bool) {
	if q.Hi != 0 || q.Lo>>63 != 0 {
		return 0, false
	}
	return int64(q.Lo), true
}

// decimal returns the amount in units of exposure as an exact decimal, for
// grains of 10^-digits.
func (q Quantity) decimal(digits int) string { return q.Decimal(digits) }

// Decimal writes the quantity exactly, with its decimal places.
func (q Quantity) Decimal(digits int) string {
	return string(q.appendDecimal(nil, digits))
}

func (q Quantity) appendDecimal(b []byte, digits int) []byte {
	var room [48]byte // 2^128 has 39 digits
	s := room[:0]
	if q.Hi == 0 {
		s = strconv.AppendUint(s, q.Lo, 10)
	} else {
		s = q.big().Append(s, 10)
	}
	whole := max(len(s)-digits, 0)
	b = append(b, s[:whole]...)
	if whole == 0 {
		b = append(b, '0')
	}
	frac := s[whole:]
	for len(frac) > 0 && frac[len(frac)-1] == '0' {
		frac = frac[:len(frac)-1]
	}
	if len(frac) == 0 {
		return b
	}
	b = append(b, '.')
	for range digits - (len(s) - whole) {
		b = append(b, '0')
	}
	return append(b, frac...)
}

func (q Quantity) big() *big.Int {
	n := new(big.Int).SetUint64(q.Hi)
	return n.Lsh(n, 64).Or(n, new(big.Int).SetUint64(q.Lo))
}

// spread divides q over parts in proportion to their weights, by the method of
// largest remainders: the parts sum to q exactly, ties go to the earlier part.
// q must be below 2^63 grains and the weights not all zero.
func (q Quantity) spread(weights []uint64) []Quantity {
	var total uint64
	for _, w := range weights {
		total += w
	}
	parts := make([]Quantity, len(weights))
	rest := make([]uint64, len(weights))
	left := q.Lo
	for i, w := range weights {
		hi, lo := bits.Mul64(q.Lo, w)
		parts[i].Lo, rest[i] = bits.Div64(hi, lo, total)
		left -= parts[i].Lo
	}
	for ; left > 0; left-- {
		best := 0
		for i := range rest {
			if rest[i] > rest[best] {
				best = i
			}
		}
		parts[best].Lo++
		rest[best] = 0
	}
	return parts
}
