package monitor

import (
	"math"

	"tailbell/exact"
)

// independent is one of the independent counts in a sum.
type independent interface {
	PMF(k int64) float64
	Upper(k int64) float64
}

// convolved is the law of a sum of independent counts that has no closed
// form: binomials of unequal probabilities, or beta-binomials. Its tails are
// sums of positive terms, so they are accurate to about 1e-14 for each part;
// time grows with the number of parts and the square of the count.
type convolved struct {
	parts []independent
	mean  float64
}

// Upper returns P(X >= k).
func (c convolved) Upper(k int64) float64 {
	if k <= 0 {
		return 1
	}
	below, pmf, top := make([]float64, k), make([]float64, k), 0.0
	below[0] = 1
	for _, p := range c.parts {
		masses(pmf, p)
		tail := p.Upper(k) // of what is missing to k when the sum is s
		for s := range below {
			top += float64(below[s] * tail)
			tail += pmf[int(k)-1-s]
		}
		convolve(below, pmf)
	}
	return min(top, 1)
}

// Lower returns P(X <= k).
func (c convolved) Lower(k int64) float64 {
	if k < 0 {
		return 0
	}
	upTo, pmf := make([]float64, k+1), make([]float64, k+1)
	upTo[0] = 1
	for _, p := range c.parts {
		masses(pmf, p)
		convolve(upTo, pmf)
	}
	sum := 0.0
	for _, v := range upTo {
		sum += v
	}
	return min(sum, 1)
}

// convolve replaces the probabilities of a sum by those of the sum and one
// more part, as far as the slice reaches. Products are rounded by themselves,
// so that the result is the same on every machine.
func convolve(sum, pmf []float64) {
	some := len(pmf)
	for some > 1 && pmf[some-1] == 0 {
		some--
	}
	for s := len(sum) - 1; s >= 0; s-- {
		v := 0.0
		for j, m := range pmf[:min(s+1, some)] {
			v += float64(sum[s-j] * m)
		}
		sum[s] = v
	}
}

// masses fills in P(X = j) for each j from 0, by the ratios of neighbours,
// which are exact in form; every so often, and where they are tiny, afresh.
// Beyond the mean those under 1e-290 count as nothing.
func masses(pmf []float64, p independent) {
	var n, a, b float64
	switch x := p.(type) {
	case exact.BetaBinomial:
		n, a, b = float64(x.N), x.A, x.B
	case exact.Binomial:
		n = float64(x.N)
		a, b = x.P, x.Q
	}
	_, spread := p.(exact.BetaBinomial)
	mean := n * (a / (a + b))
	for j := range pmf {
		before := float64(j) - 1
		switch {
		case float64(j) > n, float64(j) > mean && j > 0 && pmf[j-1] < 1e-290:
			pmf[j] = 0
		case j%32 == 0 || pmf[j-1] < 1e-290 || a == 0 || b == 0:
			pmf[j] = p.PMF(int64(j))
		case spread:
			pmf[j] = pmf[j-1] * ((n - before) / float64(j)) * ((a + before) / (b + (n - float64(j))))
		default:
			pmf[j] = pmf[j-1] * ((n - before) / float64(j)) * (a / b)
		}
	}
}

// LogUpper returns ln P(X >= k); a tail under 1e-308 counts as 5e-324.
func (c convolved) LogUpper(k int64) float64 { return logOf(c.Upper(k)) }

// LogLower returns ln P(X <= k); a tail under 1e-308 counts as 5e-324.
func (c convolved) LogLower(k int64) float64 { return logOf(c.Lower(k)) }

func logOf(p float64) float64 { return math.Log(max(p, math.SmallestNonzeroFloat64)) }

// CriticalUpper returns the smallest k with P(X >= k) <= limit.
func (c convolved) CriticalUpper(limit float64) (k int64, size float64, ok bool) {
	const most = 1 << 20
	lo, hi := int64(0), int64(c.mean)+1 // Upper(lo) > limit
	for c.Upper(hi) > limit {
		if lo, hi = hi, 2*hi; hi > most {
			return 0, 0, false
		}
	}
	for hi-lo > 1 {
		if mid := lo + (hi-lo)/2; c.Upper(mid) > limit {
			lo = mid
		} else {
			hi = mid
		}
	}
	return hi, c.Upper(hi), c.Upper(hi) > 0
}

// CriticalLower returns the largest k with P(X <= k) <= limit; ok is false
// where even no event is no signal.
func (c convolved) CriticalLower(limit float64) (k int64, size float64, ok bool) {
	if size = c.Lower(0); size > limit {
		return 0, 0, false
	}
	lo, hi := int64(0), int64(c.mean)+1 // Lower(lo) <= limit
	for c.Lower(hi) <= limit {
		lo, hi = hi, 2*hi
	}
	for hi-lo > 1 {
		if mid := lo + (hi-lo)/2; c.Lower(mid) <= limit {
			lo = mid
		} else {
			hi = mid
		}
	}
	return lo, c.Lower(lo), true
}
