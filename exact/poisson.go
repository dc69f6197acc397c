package exact

import "math"

// Poisson is the law of the number of events in Exposure at Rate a unit of exposure. The mean
// Rate*Exposure is formed to 106 bits: half a unit in the last place of a mean of 1e9 moves a
// deep tail by 1e-10.
//
// Rate and Exposure must be finite and not negative, else every method gives NaN (and ok =
// false). A mean of 0 puts all probability on 0.
type Poisson struct{ Rate, Exposure float64 }

// Mean is Rate*Exposure rounded to a float64.
func (x Poisson) Mean() float64 { return x.mean().float() }

func (x Poisson) mean() dd {
	switch {
	case x.Exposure == 1:
		return dd{x.Rate, 0}
	case x.Rate == 1:
		return dd{x.Exposure, 0}
	}
	return twoProd(x.Rate, x.Exposure)
}

func (x Poisson) valid() bool {
	m := x.Rate * x.Exposure
	return x.Rate >= 0 && x.Exposure >= 0 && m <= 1e300
}

func (x Poisson) point(k int64) point {
	switch mu := x.mean(); {
	case !x.valid() || k > maxCount:
		return undefined.point
	case k < 0 || mu.hi == 0 && k > 0:
		return impossible.point
	default:
		return poissonPoint(float64(k), mu)
	}
}

func (x Poisson) side(k int64, upper, mid bool) side {
	if !x.valid() || k > maxCount {
		return undefined
	}
	mu := x.mean()
	if k < 0 || mu.hi == 0 && k > 0 {
		return outside(k < 0 == upper)
	}
	return poissonSide(float64(k), mu, upper, mid)
}

func poissonSide(k float64, mu dd, upper, mid bool) side {
	s := side{}
	if s.flip = upper == (k <= mu.hi); s.flip {
		if !mid { // P(X >= k) = 1 - P(X <= k-1), while mid-p mirrors at k itself
			if !upper {
				k++
			} else if k--; k < 0 {
				return certain
			}
		}
		upper = !upper
	}
	if k >= uniformFrom*uniformFrom && math.Abs(mu.hi-k) < nearMean*k {
		s.point, s.ratio = nearPoisson(!upper, k, mu)
	} else if s.point = poissonPoint(k, mu); upper {
		s.ratio = poissonUpperRatio(k, mu)
	} else {
		s.ratio = poissonLowerRatio(k, mu)
	}
	if mid {
		s.ratio -= 0.5
	}
	return s
}

// outside is a tail that holds everything or nothing.
func outside(all bool) side {
	if all {
		return certain
	}
	return impossible
}

// PMF is P(X = k); 0 outside the support.
func (x Poisson) PMF(k int64) float64 { return x.point(k).value() }

// LogPMF is the natural logarithm of P(X = k), -Inf outside the support.
func (x Poisson) LogPMF(k int64) float64 { return logMassByEnds(x, k) }

// Upper is P(X >= k).
func (x Poisson) Upper(k int64) float64 { return x.side(k, true, false).prob() }

// LogUpper is log P(X >= k), where Upper underflows as well.
func (x Poisson) LogUpper(k int64) float64 { return x.side(k, true, false).logProb() }

// Lower is P(X <= k).
func (x Poisson) Lower(k int64) float64 { return x.side(k, false, false).prob() }

// LogLower is log P(X <= k), where Lower underflows as well.
func (x Poisson) LogLower(k int64) float64 { return x.side(k, false, false).logProb() }

// MidUpper is P(X > k) + P(X = k)/2 (Lancaster 1961).
func (x Poisson) MidUpper(k int64) float64 { return x.side(k, true, true).prob() }

// LogMidUpper is the logarithm of MidUpper.
func (x Poisson) LogMidUpper(k int64) float64 { return x.side(k, true, true).logProb() }

// MidLower is P(X < k) + P(X = k)/2 (Lancaster 1961).
func (x Poisson) MidLower(k int64) float64 { return x.side(k, false, true).prob() }

// LogMidLower is the logarithm of MidLower.
func (x Poisson) LogMidLower(k int64) float64 { return x.side(k, false, true).logProb() }

// CriticalUpper is the smallest k with P(X >= k) <= limit and the size attained there; ok is
// false where no count can signal. See the package's note on sizes that hit a limit exactly.
func (x Poisson) CriticalUpper(limit float64) (k int64, size float64, ok bool) {
	return criticalUpper(x, limit)
}

// CriticalLower is the largest k with P(X <= k) <= limit and the size attained there; ok is
// false where no count can signal.
func (x Poisson) CriticalLower(limit float64) (k int64, size float64, ok bool) {
	return criticalLower(x, limit)
}

func (x Poisson) spread() (mean, sd float64) {
	m := x.Mean()
	return m, math.Sqrt(m)
}

func (x Poisson) support() (lo, hi int64) { return 0, maxCount }

func (x Poisson) thin(int64, bool) float64 { return 1 }

// TwoSided is the two-sided p-value of k, at most 1.
func (x Poisson) TwoSided(k int64, how Sides) float64 { return twoSided(x, k, how, false).prob() }

// LogTwoSided is the logarithm of TwoSided, where TwoSided underflows as well.
func (x Poisson) LogTwoSided(k int64, how Sides) float64 {
	return twoSided(x, k, how, false).logProb()
}
