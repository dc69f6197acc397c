package exact

import "math"

// BetaBinomial is the law of events in N trials whose probability is itself drawn from
// Beta(A, B): mean N A/(A+B), more spread than the binomial. Tails are summed over up to N
// terms, so N is at most 2^22; A and B are in (0, 1e15]. Else NaN.
type BetaBinomial struct {
	N    int64
	A, B float64
}

func (x BetaBinomial) valid() bool {
	return x.N >= 0 && x.N <= 1<<22 && x.A > 0 && x.A <= 1e15 && x.B > 0 && x.B <= 1e15
}

func (x BetaBinomial) support() (lo, hi int64) { return 0, x.N }

func (x BetaBinomial) spread() (mean, sd float64) {
	n, s := float64(x.N), x.A+x.B
	mean = n * x.A / s
	return mean, math.Sqrt(mean * x.B / s * (s + n) / (s + 1))
}

func (x BetaBinomial) thin(int64, bool) float64 { return 1 }

func (x BetaBinomial) point(k int64) point {
	switch {
	case !x.valid():
		return undefined.point
	case k < 0 || k > x.N:
		return impossible.point
	case x.N == 0:
		return point{0, 0, 1}
	}
	return polya{float64(x.N), x.A, x.B}.point(float64(k))
}

func (x BetaBinomial) side(k int64, upper, mid bool) side {
	switch {
	case !x.valid():
		return undefined
	case k < 0 || k > x.N:
		return outside(k < 0 == upper)
	case x.N == 0:
		return atOnly(mid)
	}
	p := polya{float64(x.N), x.A, x.B}
	return splitTail(float64(k), p.n, p.n*p.a/(p.a+p.b), upper, mid, p.direct)
}

// polya is a beta-binomial in float64.
type polya struct{ n, a, b float64 }

// point is n! (k+a)! (n-k+b)! (a+b)!/(k! (n-k)! (n+a+b)! a! b!) times the three factors that
// turn z! into gamma(z), each factorial in Stirling's form, powers gathered as near 1 as they go.
func (p polya) point(k float64) point {
	m := p.n - k
	ka, mb, ab := twoSum(k, p.a), twoSum(m, p.b), twoSum(p.a, p.b)
	t := ab.addFloat(p.n)
	e := power(k, ka.mulFloat(p.n).div(t.mulFloat(k)))
	e = e.add(power(m, mb.mulFloat(p.n).div(t.mulFloat(m))))
	e = e.add(power(p.a, ka.mul(ab).div(t.mulFloat(p.a))))
	e = e.add(power(p.b, mb.mul(ab).div(t.mulFloat(p.b))))
	st := stirling(p.n) - stirling(k) - stirling(m)
	st += stirlingReal(ka) + stirlingReal(mb) + stirlingReal(ab)
	st -= stirlingReal(t) + stirlingReal(dd{p.a, 0}) + stirlingReal(dd{p.b, 0})
	e = e.addFloat(st)
	root := circle(p.n) / circle(k) / circle(m) * (ka.hi / p.a) * (mb.hi / p.b) * (ab.hi / t.hi)
	return point{e.hi, e.lo, math.Sqrt(root) * (p.a / ka.hi) * (p.b / mb.hi) * (t.hi / ab.hi)}
}

// power is x log(base), 0 for x = 0.
func power(x float64, base dd) dd {
	if x == 0 {
		return dd{}
	}
	return base.log().mulFloat(x)
}

func (p polya) direct(k float64, upper, mid bool) side {
	s := side{point: p.point(k)}
	if !upper {
		p, k = polya{p.n, p.b, p.a}, p.n-k
	}
	t := 1.0
	s.ratio = 1
	for j := k; j < p.n && t > 0x1p-60*s.ratio; j++ {
		t *= float64((p.n-j)*(j+p.a)) / float64((j+1)*(p.n-j-1+p.b))
		s.ratio += t
	}
	if mid {
		s.ratio -= 0.5
	}
	return s
}

// PMF is P(X = k); 0 outside the support.
func (x BetaBinomial) PMF(k int64) float64 { return x.point(k).value() }

// LogPMF is the natural logarithm of P(X = k), -Inf outside the support.
func (x BetaBinomial) LogPMF(k int64) float64 { return logMass(x, k) }

// Upper is P(X >= k).
func (x BetaBinomial) Upper(k int64) float64 { return x.side(k, true, false).prob() }

// LogUpper is log P(X >= k), where Upper underflows as well.
func (x BetaBinomial) LogUpper(k int64) float64 { return x.side(k, true, false).logProb() }

// Lower is P(X <= k).
func (x BetaBinomial) Lower(k int64) float64 { return x.side(k, false, false).prob() }

// LogLower is log P(X <= k), where Lower underflows as well.
func (x BetaBinomial) LogLower(k int64) float64 { return x.side(k, false, false).logProb() }

// MidUpper is P(X > k) + P(X = k)/2 (Lancaster 1961).
func (x BetaBinomial) MidUpper(k int64) float64 { return x.side(k, true, true).prob() }

// LogMidUpper is the logarithm of MidUpper.
func (x BetaBinomial) LogMidUpper(k int64) float64 { return x.side(k, true, true).logProb() }

// MidLower is P(X < k) + P(X = k)/2 (Lancaster 1961).
func (x BetaBinomial) MidLower(k int64) float64 { return x.side(k, false, true).prob() }

// LogMidLower is the logarithm of MidLower.
func (x BetaBinomial) LogMidLower(k int64) float64 { return x.side(k, false, true).logProb() }

// CriticalUpper is the smallest k with P(X >= k) <= limit and the size attained there; ok is
// false where no count can signal. See the package's note on sizes that hit a limit exactly.
func (x BetaBinomial) CriticalUpper(limit float64) (k int64, size float64, ok bool) {
	return criticalUpper(x, limit)
}

// CriticalLower is the largest k with P(X <= k) <= limit and the size attained there; ok is
// false where no count can signal.
func (x BetaBinomial) CriticalLower(limit float64) (k int64, size float64, ok bool) {
	return criticalLower(x, limit)
}

// TwoSided is the two-sided p-value of k, at most 1. With A and B both under 1 the law has two
// peaks and no minimum-likelihood form: NaN.
func (x BetaBinomial) TwoSided(k int64, how Sides) float64 { return x.twoSided(k, how).prob() }

// LogTwoSided is the logarithm of TwoSided, where TwoSided underflows as well.
func (x BetaBinomial) LogTwoSided(k int64, how Sides) float64 { return x.twoSided(k, how).logProb() }

func (x BetaBinomial) twoSided(k int64, how Sides) pair {
	if how == MinLike && x.A < 1 && x.B < 1 {
		return pair{own: undefined, double: true}
	}
	return twoSided(x, k, how, false)
}
