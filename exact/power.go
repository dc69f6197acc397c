package exact

import "math"

// PowerUpper is the chance that an upper look at limit signals when the rate is ratio times
// Rate, with the critical count it takes; ok is false where no count can signal.
func (x Poisson) PowerUpper(limit, ratio float64) (power float64, k int64, ok bool) {
	if k, _, ok = x.CriticalUpper(limit); !ok {
		return 0, 0, false
	}
	return poissonAtRatio(x, ratio).side(k, true, false).prob(), k, true
}

// PowerLower is PowerUpper for the lower tail.
func (x Poisson) PowerLower(limit, ratio float64) (power float64, k int64, ok bool) {
	if k, _, ok = x.CriticalLower(limit); !ok {
		return 0, 0, false
	}
	return poissonAtRatio(x, ratio).side(k, false, false).prob(), k, true
}

// poissonMean is a Poisson law by its mean in double-double.
type poissonMean struct {
	mu dd
	ok bool
}

func poissonAtRatio(x Poisson, ratio float64) poissonMean {
	return poissonMean{x.mean().mulFloat(ratio), x.valid() && ratio >= 0 && x.Mean()*ratio <= 1e300}
}

func (x poissonMean) side(k int64, upper, mid bool) side {
	switch {
	case !x.ok:
		return undefined
	case k < 0 || x.mu.hi == 0 && k > 0:
		return outside(k < 0 == upper)
	}
	return poissonSide(float64(k), x.mu, upper, mid)
}

// PowerUpper is the chance that an upper look at limit signals when the probability is p1.
func (x Binomial) PowerUpper(limit, p1 float64) (power float64, k int64, ok bool) {
	if k, _, ok = x.CriticalUpper(limit); !ok {
		return 0, 0, false
	}
	return NewBinomial(x.N, p1).Upper(k), k, true
}

// PowerLower is PowerUpper for the lower tail.
func (x Binomial) PowerLower(limit, p1 float64) (power float64, k int64, ok bool) {
	if k, _, ok = x.CriticalLower(limit); !ok {
		return 0, 0, false
	}
	return NewBinomial(x.N, p1).Lower(k), k, true
}

// Plan is the least that reaches a wanted power: the critical count, and the exposure (or
// trials) at which the power is reached with it. Power against exposure is a saw: it falls each
// time the critical count steps up. Up to Most the critical count stays and the power holds.
type Plan struct {
	Count       int64
	Least, Most float64
}

// NeededExposure is the least exposure at which a look at limit at a baseline rate has the wanted
// power when the true rate is ratio times rate: the upper tail for ratio > 1, the lower for
// ratio < 1. ok is false outside the domain (0 < limit, power < 1, rate > 0, ratio not 1) and
// where more than a million events would be needed.
func NeededExposure(rate, ratio, limit, power float64) (plan Plan, ok bool) {
	if !positive(rate) || !(ratio >= 0 && ratio < 1e300) || ratio == 1 || !(limit > 0 && limit < 1) || !(power > 0 && power < 1) {
		return Plan{}, false
	}
	upper := ratio > 1
	span := func(k int64) (least, most float64) {
		a := poissonBound(float64(k), limit, upper, false) / rate
		b := poissonBound(float64(k), power, upper, false) / (rate * ratio)
		if upper {
			return b, a // P(X >= k) grows with exposure: power from b on, size to a
		}
		return a, b
	}
	first := int64(0)
	if upper {
		first = 1
	}
	enough := func(k int64) bool { l, m := span(k); return l <= m }
	const most = 1 << 20
	if !enough(most) {
		return Plan{}, false
	}
	k := outward(first-1, most, float64(first), enough)
	l, m := span(k)
	if math.IsInf(l, 0) {
		return Plan{}, false
	}
	return Plan{k, l, m}, true
}

// NeededTrials is the least number of trials at which a look at limit at a baseline probability
// p0 has the wanted power when the true probability is p1: the upper tail for p1 > p0, else the
// lower. Plan's Least and Most are numbers of trials. ok is false outside the domain and where
// the critical count (of events, or of trials without one) would pass 100,000.
func NeededTrials(p0, p1, limit, power float64) (plan Plan, ok bool) {
	if !(p0 > 0 && p0 < 1 && p1 >= 0 && p1 <= 1) || p0 == p1 || !(limit > 0 && limit < 1) || !(power > 0 && power < 1) {
		return Plan{}, false
	}
	need := trialsNeeded{p0, p1, limit, power, p1 > p0}
	k := int64(0)
	if need.upper {
		k = 1
	}
	const beyond = 100000
	// In real trials a critical count does once and for all from some count on; in whole ones it
	// can miss by one trial at either end there, and by no more. So none does before the first that
	// does to within one, following one that does not.
	nearly := func(k int64) bool {
		least, most := need.span(k, 1, 1)
		return least <= most+1 || most < 0 || least < 0 // out of reach, and so is all after it
	}
	if !nearly(beyond - 1) {
		return Plan{}, false
	}
	k = outward(k-1, beyond-1, float64(k), nearly)
	least, most := int64(1), int64(1)
	for ; k < beyond; k++ {
		if least, most = need.span(k, least, most); least < 0 {
			return Plan{}, false
		}
		if least <= most || most < 0 {
			m := float64(most)
			if most < 0 {
				m = math.Inf(1)
			}
			return Plan{k, float64(least), m}, true
		}
		least, most = max(least, 1), max(most, 1)
	}
	return Plan{}, false
}

// trialsNeeded is what NeededTrials is asked.
type trialsNeeded struct {
	p0, p1, limit, power float64
	upper                bool
}

// span is the least and the largest number of trials at which a critical count of k does, the one
// sought from least, the other from most on: negative where there is none.
func (x trialsNeeded) span(k, least, most int64) (int64, int64) {
	if x.upper {
		least = trialsUntil(least, func(n int64) bool { return NewBinomial(n, x.p1).Upper(k) >= x.power })
		return least, trialsUntil(most, func(n int64) bool { return NewBinomial(n, x.p0).Upper(k) > x.limit*atLimit }) - 1
	}
	least = trialsUntil(least, func(n int64) bool { return NewBinomial(n, x.p0).Lower(k) <= x.limit*atLimit })
	return least, trialsUntil(most, func(n int64) bool { return NewBinomial(n, x.p1).Lower(k) < x.power }) - 1
}

// trialsUntil is the first n >= from for which done holds (done is monotone), or -2 where none
// up to 2^52 does.
func trialsUntil(from int64, done func(int64) bool) int64 {
	const far = maxCount / 2
	if done(from) {
		return from
	}
	step, n := int64(1), from
	for {
		next := min(n+step, far)
		if done(next) {
			return outward(n, next, float64(n), done)
		}
		if next == far {
			return -2
		}
		n, step = next, 2*step
	}
}
