package exact

import "math"

// TwoRate compares a count n in Exposure with RefEvents in RefExposure: the conditional test
// given n+RefEvents of Przyborowski and Wilenski (1940, Biometrika 31). Under a true ratio of
// rates of Margin, n is Binomial(n+RefEvents, q) with q = m E/(m E + F). Margin 0 means 1.
//
// The total moves with n, so a tail at n is that of the binomial with n+RefEvents trials.
// Exposures and Margin must be positive and finite, RefEvents in [0, 2^53]; else NaN.
type TwoRate struct {
	RefEvents                     int64
	Exposure, RefExposure, Margin float64
}

func (x TwoRate) valid() bool {
	return x.RefEvents >= 0 && x.RefEvents <= maxCount && positive(x.Exposure) && positive(x.RefExposure) &&
		(x.Margin == 0 || positive(x.Margin))
}

func positive(v float64) bool { return v > 0 && v <= math.MaxFloat64 }

// chances are q and 1-q to 106 bits.
func (x TwoRate) chances() (p, q dd) {
	w := dd{x.Exposure, 0}
	if x.Margin != 0 && x.Margin != 1 {
		w = twoProd(x.Exposure, x.Margin)
	}
	f := dd{x.RefExposure, 0}
	t := w.add(f)
	return w.div(t), f.div(t)
}

func (x TwoRate) side(n int64, upper, mid bool) side {
	if !x.valid() || n > maxCount-x.RefEvents {
		return undefined
	}
	if n < 0 {
		return outside(upper)
	}
	p, q := x.chances()
	return binomialSide(n, n+x.RefEvents, p, q, upper, mid)
}

func (x TwoRate) spread() (mean, sd float64) {
	r := x.Exposure / x.RefExposure
	if x.Margin != 0 {
		r *= x.Margin
	}
	m := float64(x.RefEvents) + 1
	return r * m, r*math.Sqrt(m) + math.Sqrt(r*m)
}

func (x TwoRate) support() (lo, hi int64) { return 0, maxCount - x.RefEvents }

// RatioBounds are the exact two-sided bounds at level 1-alpha of the ratio of the rate behind n
// events in Exposure to the reference's, from Clopper and Pearson's on q; Margin plays no part.
// n = 0 gives 0 below, RefEvents = 0 gives +Inf above: no events at all say nothing of the ratio.
// NaN where the values are out of their domain.
func (x TwoRate) RatioBounds(n int64, alpha float64) (lower, upper float64) {
	return x.ratioBounds(n, alpha, false)
}

// RatioBoundsMid is RatioBounds with mid-p tails.
func (x TwoRate) RatioBoundsMid(n int64, alpha float64) (lower, upper float64) {
	return x.ratioBounds(n, alpha, true)
}

func (x TwoRate) ratioBounds(n int64, alpha float64, mid bool) (lower, upper float64) {
	if !x.valid() || n < 0 || n > maxCount-x.RefEvents || !(alpha > 0 && alpha <= 1) {
		return math.NaN(), math.NaN()
	}
	if n+x.RefEvents == 0 {
		return 0, math.Inf(1)
	}
	r := x.RefExposure / x.Exposure
	p, q := binomialLower(n, n+x.RefEvents, alpha/2, mid)
	lower = p / q * r
	q, p = binomialLower(x.RefEvents, n+x.RefEvents, alpha/2, mid)
	return lower, p / q * r
}

// Upper is P(X >= k).
func (x TwoRate) Upper(k int64) float64 { return x.side(k, true, false).prob() }

// LogUpper is log P(X >= k), where Upper underflows as well.
func (x TwoRate) LogUpper(k int64) float64 { return x.side(k, true, false).logProb() }

// Lower is P(X <= k).
func (x TwoRate) Lower(k int64) float64 { return x.side(k, false, false).prob() }

// LogLower is log P(X <= k), where Lower underflows as well.
func (x TwoRate) LogLower(k int64) float64 { return x.side(k, false, false).logProb() }

// MidUpper is P(X > k) + P(X = k)/2 (Lancaster 1961).
func (x TwoRate) MidUpper(k int64) float64 { return x.side(k, true, true).prob() }

// LogMidUpper is the logarithm of MidUpper.
func (x TwoRate) LogMidUpper(k int64) float64 { return x.side(k, true, true).logProb() }

// MidLower is P(X < k) + P(X = k)/2 (Lancaster 1961).
func (x TwoRate) MidLower(k int64) float64 { return x.side(k, false, true).prob() }

// LogMidLower is the logarithm of MidLower.
func (x TwoRate) LogMidLower(k int64) float64 { return x.side(k, false, true).logProb() }

// CriticalUpper is the smallest k with P(X >= k) <= limit and the size attained there; ok is
// false where no count can signal. See the package's note on sizes that hit a limit exactly.
func (x TwoRate) CriticalUpper(limit float64) (k int64, size float64, ok bool) {
	return criticalUpper(x, limit)
}

// CriticalLower is the largest k with P(X <= k) <= limit and the size attained there; ok is
// false where no count can signal.
func (x TwoRate) CriticalLower(limit float64) (k int64, size float64, ok bool) {
	return criticalLower(x, limit)
}

func (x TwoRate) thin(n int64, upper bool) float64 {
	if upper {
		_, q := x.chances()
		return q.hi
	}
	return float64(x.RefEvents) / float64(n+x.RefEvents)
}

// TwoSided is the two-sided p-value of k, at most 1.
func (x TwoRate) TwoSided(k int64, how Sides) float64 {
	return twoSided(x.given(k), k, how, false).prob()
}

// LogTwoSided is the logarithm of TwoSided, where TwoSided underflows as well.
func (x TwoRate) LogTwoSided(k int64, how Sides) float64 {
	return twoSided(x.given(k), k, how, false).logProb()
}

// given is the law of the count once the total with n is known.
func (x TwoRate) given(n int64) trials {
	if !x.valid() || n < 0 || n > maxCount-x.RefEvents {
		return trials{n: -1}
	}
	p, q := x.chances()
	return trials{n + x.RefEvents, p, q}
}
