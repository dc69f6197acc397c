package monitor

import (
	"math/bits"
	"time"

	"tailbell/config"
)

// yearZero is 0000-01-01T00:00:00Z, less a day for offsets: the origin from
// which exposure by the clock is counted.
var yearZero = InstantOf(time.Date(-1, 12, 31, 0, 0, 0, 0, time.UTC))

// clockRule is exposure by elapsed time: factor grains for every per
// microseconds.
type clockRule struct {
	factor uint64
	per    uint64
}

func newClockRule(c config.ClockExposure, digits int) clockRule {
	rule := clockRule{factor: c.Size.Coef, per: uint64(c.Per / time.Microsecond)}
	for n := digits - int(c.Size.Digits); n > 0; n-- {
		rule.factor *= 10
	}
	for n := int(c.Size.Digits) - digits; n > 0; n-- {
		rule.per *= 10
	}
	return rule
}

// between returns the exposure over [from, to). It telescopes: adjoining
// spans sum to the exposure of their union, exactly.
func (c clockRule) between(from, to Instant) Quantity {
	return c.until(to).sub(c.until(from))
}

func (c clockRule) until(at Instant) Quantity {
	hi, lo := bits.Mul64(uint64(at-yearZero), c.factor)
	qhi, rest := hi/c.per, hi%c.per
	qlo, _ := bits.Div64(rest, lo, c.per)
	return Quantity{qhi, qlo}
}
