package exact

import "math"

// Hypergeometric is the law of the number of white balls among Draws from an urn of White and
// Black ones, without replacement. White and Black are in [0, 2^42], Draws at most their sum; else
// NaN. A tail is summed: time grows with the standard deviation, to some 20 ms at 2^42.
type Hypergeometric struct{ White, Black, Draws int64 }

// maxUrn is the largest number of balls of one colour.
const maxUrn = 1 << 42

func (x Hypergeometric) valid() bool {
	return x.White >= 0 && x.Black >= 0 && x.Draws >= 0 && x.White <= maxUrn && x.Black <= maxUrn &&
		x.Draws <= x.White+x.Black
}

func (x Hypergeometric) urn() urn {
	return urn{float64(x.White), float64(x.Black), float64(x.Draws), dd{1, 0}}
}

func (x Hypergeometric) point(k int64) point {
	if !x.valid() {
		return undefined.point
	}
	return x.urn().mass(float64(k))
}

func (x Hypergeometric) side(k int64, upper, mid bool) side {
	if !x.valid() {
		return undefined
	}
	return x.urn().side(float64(k), upper, mid)
}

func (x Hypergeometric) support() (lo, hi int64) {
	return max(0, x.Draws-x.Black), min(x.White, x.Draws)
}

func (x Hypergeometric) spread() (mean, sd float64) {
	n := float64(x.White + x.Black)
	mean = float64(x.Draws) * float64(x.White) / n
	return mean, math.Sqrt(mean * float64(x.Black) / n * (n - float64(x.Draws)) / max(1, n-1))
}

func (x Hypergeometric) thin(int64, bool) float64 { return 1 }

// PMF is P(X = k); 0 outside the support.
func (x Hypergeometric) PMF(k int64) float64 { return x.point(k).value() }

// LogPMF is the natural logarithm of P(X = k), -Inf outside the support.
func (x Hypergeometric) LogPMF(k int64) float64 { return logMass(x, k) }

// Upper is P(X >= k).
func (x Hypergeometric) Upper(k int64) float64 { return x.side(k, true, false).prob() }

// LogUpper is log P(X >= k), where Upper underflows as well.
func (x Hypergeometric) LogUpper(k int64) float64 { return x.side(k, true, false).logProb() }

// Lower is P(X <= k).
func (x Hypergeometric) Lower(k int64) float64 { return x.side(k, false, false).prob() }

// LogLower is log P(X <= k), where Lower underflows as well.
func (x Hypergeometric) LogLower(k int64) float64 { return x.side(k, false, false).logProb() }

// MidUpper is P(X > k) + P(X = k)/2 (Lancaster 1961).
func (x Hypergeometric) MidUpper(k int64) float64 { return x.side(k, true, true).prob() }

// LogMidUpper is the logarithm of MidUpper.
func (x Hypergeometric) LogMidUpper(k int64) float64 { return x.side(k, true, true).logProb() }

// MidLower is P(X < k) + P(X = k)/2 (Lancaster 1961).
func (x Hypergeometric) MidLower(k int64) float64 { return x.side(k, false, true).prob() }

// LogMidLower is the logarithm of MidLower.
func (x Hypergeometric) LogMidLower(k int64) float64 { return x.side(k, false, true).logProb() }

// CriticalUpper is the smallest k with P(X >= k) <= limit and the size attained there; ok is
// false where no count can signal. See the package's note on sizes that hit a limit exactly.
func (x Hypergeometric) CriticalUpper(limit float64) (k int64, size float64, ok bool) {
	return criticalUpper(x, limit)
}

// CriticalLower is the largest k with P(X <= k) <= limit and the size attained there; ok is
// false where no count can signal.
func (x Hypergeometric) CriticalLower(limit float64) (k int64, size float64, ok bool) {
	return criticalLower(x, limit)
}

// FisherNoncentral is Fisher's noncentral hypergeometric law (Fisher 1935): Hypergeometric with
// each count k weighted by Odds^k, Odds the odds ratio. Odds is positive and finite; else NaN.
type FisherNoncentral struct {
	White, Black, Draws int64
	Odds                float64
}

func (x FisherNoncentral) valid() bool {
	return Hypergeometric{x.White, x.Black, x.Draws}.valid() && positive(x.Odds)
}

func (x FisherNoncentral) urn() urn {
	return urn{float64(x.White), float64(x.Black), float64(x.Draws), dd{x.Odds, 0}}
}

func (x FisherNoncentral) point(k int64) point {
	if !x.valid() {
		return undefined.point
	}
	return x.urn().mass(float64(k))
}

func (x FisherNoncentral) side(k int64, upper, mid bool) side {
	if !x.valid() {
		return undefined
	}
	return x.urn().side(float64(k), upper, mid)
}

func (x FisherNoncentral) support() (lo, hi int64) {
	return Hypergeometric{x.White, x.Black, x.Draws}.support()
}

func (x FisherNoncentral) spread() (mean, sd float64) { return x.urn().spread() }

func (x FisherNoncentral) thin(int64, bool) float64 { return 1 }

// Mean is the expected count.
func (x FisherNoncentral) Mean() float64 {
	if !x.valid() {
		return math.NaN()
	}
	_, _, mean := x.urn().total()
	return mean
}

// PMF is P(X = k); 0 outside the support.
func (x FisherNoncentral) PMF(k int64) float64 { return x.point(k).value() }

// LogPMF is the natural logarithm of P(X = k), -Inf outside the support.
func (x FisherNoncentral) LogPMF(k int64) float64 { return logMass(x, k) }

// Upper is P(X >= k).
func (x FisherNoncentral) Upper(k int64) float64 { return x.side(k, true, false).prob() }

// LogUpper is log P(X >= k), where Upper underflows as well.
func (x FisherNoncentral) LogUpper(k int64) float64 { return x.side(k, true, false).logProb() }

// Lower is P(X <= k).
func (x FisherNoncentral) Lower(k int64) float64 { return x.side(k, false, false).prob() }

// LogLower is log P(X <= k), where Lower underflows as well.
func (x FisherNoncentral) LogLower(k int64) float64 { return x.side(k, false, false).logProb() }

// MidUpper is P(X > k) + P(X = k)/2 (Lancaster 1961).
func (x FisherNoncentral) MidUpper(k int64) float64 { return x.side(k, true, true).prob() }

// LogMidUpper is the logarithm of MidUpper.
func (x FisherNoncentral) LogMidUpper(k int64) float64 { return x.side(k, true, true).logProb() }

// MidLower is P(X < k) + P(X = k)/2 (Lancaster 1961).
func (x FisherNoncentral) MidLower(k int64) float64 { return x.side(k, false, true).prob() }

// LogMidLower is the logarithm of MidLower.
func (x FisherNoncentral) LogMidLower(k int64) float64 { return x.side(k, false, true).logProb() }

// CriticalUpper is the smallest k with P(X >= k) <= limit and the size attained there; ok is
// false where no count can signal. See the package's note on sizes that hit a limit exactly.
func (x FisherNoncentral) CriticalUpper(limit float64) (k int64, size float64, ok bool) {
	return criticalUpper(x, limit)
}

// CriticalLower is the largest k with P(X <= k) <= limit and the size attained there; ok is
// false where no count can signal.
func (x FisherNoncentral) CriticalLower(limit float64) (k int64, size float64, ok bool) {
	return criticalLower(x, limit)
}

// TwoSided is the two-sided p-value of k, at most 1.
func (x Hypergeometric) TwoSided(k int64, how Sides) float64 {
	return twoSided(x, k, how, false).prob()
}

// LogTwoSided is the logarithm of TwoSided, where TwoSided underflows as well.
func (x Hypergeometric) LogTwoSided(k int64, how Sides) float64 {
	return twoSided(x, k, how, false).logProb()
}

// TwoSided is the two-sided p-value of k, at most 1.
func (x FisherNoncentral) TwoSided(k int64, how Sides) float64 {
	return twoSided(x, k, how, false).prob()
}

// LogTwoSided is the logarithm of TwoSided, where TwoSided underflows as well.
func (x FisherNoncentral) LogTwoSided(k int64, how Sides) float64 {
	return twoSided(x, k, how, false).logProb()
}
