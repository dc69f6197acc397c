package exact

import "math"

// Binomial is the law of the number of events in N trials, each with probability P; Q is 1-P.
// The smaller of P and Q is taken as given, the other is formed from it to 106 bits, so a
// probability next to 1 is best given by its Q. NewBinomial fills Q in.
//
// N must be in [0, 2^53], P and Q in [0, 1] with a sum of 1 to within rounding, else every
// method gives NaN (and ok = false).
type Binomial struct {
	N    int64
	P, Q float64
}

// NewBinomial is the law of the number of events in n trials with probability p.
func NewBinomial(n int64, p float64) Binomial { return Binomial{N: n, P: p, Q: 1 - p} }

func (x Binomial) valid() bool {
	s := x.P + x.Q
	return x.N >= 0 && x.N <= maxCount && x.P >= 0 && x.Q >= 0 && s >= 1-0x1p-50 && s <= 1+0x1p-50
}

// chances are P and Q to 106 bits.
func (x Binomial) chances() (p, q dd) {
	if x.P <= x.Q {
		return dd{x.P, 0}, twoSum(1, -x.P)
	}
	return twoSum(1, -x.Q), dd{x.Q, 0}
}

func (x Binomial) point(k int64) point {
	if !x.valid() {
		return undefined.point
	}
	p, q := x.chances()
	return trials{x.N, p, q}.point(k)
}

// trials is a binomial with its chances in double-double.
type trials struct {
	n    int64
	p, q dd
}

func (x trials) valid() bool { return x.n >= 0 }

func (x trials) point(k int64) point {
	switch {
	case k < 0 || k > x.n || x.p.hi == 0 && k > 0 || x.q.hi == 0 && k < x.n:
		return impossible.point
	case x.p.hi == 0 || x.q.hi == 0:
		return point{0, 0, 1}
	}
	return binomialPoint(float64(k), float64(x.n), x.p, x.q)
}

func (x trials) side(k int64, upper, mid bool) side {
	return binomialSide(k, x.n, x.p, x.q, upper, mid)
}

func (x trials) spread() (mean, sd float64) {
	m := float64(x.n) * x.p.hi
	return m, math.Sqrt(m * x.q.hi)
}

func (x trials) support() (lo, hi int64) { return 0, x.n }

func (x trials) thin(int64, bool) float64 { return 1 }

func (x Binomial) side(k int64, upper, mid bool) side {
	if !x.valid() {
		return undefined
	}
	p, q := x.chances()
	return binomialSide(k, x.N, p, q, upper, mid)
}

func binomialSide(k, n int64, p, q dd, upper, mid bool) side {
	switch {
	case k < 0 || p.hi == 0 && k > 0:
		return outside(k < 0 == upper)
	case k > n || q.hi == 0 && k < n:
		return outside(k > n != upper)
	case p.hi == 0 || q.hi == 0: // all probability on k
		return atOnly(mid)
	}
	if !upper { // P(X <= k) = P(n-X >= n-k)
		k, p, q = n-k, q, p
	}
	x, m := float64(k), float64(n)
	s := side{flip: x <= m*p.hi}
	if s.flip {
		if !mid {
			if k == 0 {
				return certain
			}
			x--
		}
		x, p, q = m-x, q, p
	}
	s.point = binomialPoint(x, m, p, q)
	s.ratio = binomialUpperRatio(x, m, p, q)
	if mid {
		s.ratio -= 0.5
	}
	return s
}

// PMF is P(X = k); 0 outside the support.
func (x Binomial) PMF(k int64) float64 { return x.point(k).value() }

// LogPMF is the natural logarithm of P(X = k), -Inf outside the support.
func (x Binomial) LogPMF(k int64) float64 { return logMassByEnds(x, k) }

// Upper is P(X >= k).
func (x Binomial) Upper(k int64) float64 { return x.side(k, true, false).prob() }

// LogUpper is log P(X >= k), where Upper underflows as well.
func (x Binomial) LogUpper(k int64) float64 { return x.side(k, true, false).logProb() }

// Lower is P(X <= k).
func (x Binomial) Lower(k int64) float64 { return x.side(k, false, false).prob() }

// LogLower is log P(X <= k), where Lower underflows as well.
func (x Binomial) LogLower(k int64) float64 { return x.side(k, false, false).logProb() }

// MidUpper is P(X > k) + P(X = k)/2 (Lancaster 1961).
func (x Binomial) MidUpper(k int64) float64 { return x.side(k, true, true).prob() }

// LogMidUpper is the logarithm of MidUpper.
func (x Binomial) LogMidUpper(k int64) float64 { return x.side(k, true, true).logProb() }

// MidLower is P(X < k) + P(X = k)/2 (Lancaster 1961).
func (x Binomial) MidLower(k int64) float64 { return x.side(k, false, true).prob() }

// LogMidLower is the logarithm of MidLower.
func (x Binomial) LogMidLower(k int64) float64 { return x.side(k, false, true).logProb() }

// CriticalUpper is the smallest k with P(X >= k) <= limit and the size attained there; ok is
// false where no count can signal. See the package's note on sizes that hit a limit exactly.
func (x Binomial) CriticalUpper(limit float64) (k int64, size float64, ok bool) {
	return criticalUpper(x, limit)
}

// CriticalLower is the largest k with P(X <= k) <= limit and the size attained there; ok is
// false where no count can signal.
func (x Binomial) CriticalLower(limit float64) (k int64, size float64, ok bool) {
	return criticalLower(x, limit)
}

func (x Binomial) spread() (mean, sd float64) {
	m := float64(x.N) * x.P
	return m, math.Sqrt(m * x.Q)
}

func (x Binomial) support() (lo, hi int64) { return 0, x.N }

func (x Binomial) thin(int64, bool) float64 { return 1 }

// TwoSided is the two-sided p-value of k, at most 1.
func (x Binomial) TwoSided(k int64, how Sides) float64 { return twoSided(x, k, how, false).prob() }

// LogTwoSided is the logarithm of TwoSided, where TwoSided underflows as well.
func (x Binomial) LogTwoSided(k int64, how Sides) float64 {
	return twoSided(x, k, how, false).logProb()
}
