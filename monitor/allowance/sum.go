package allowance

import (
	"tailbell/exact"
)

// sum is the law of a sum of independent counts, as the probabilities of all
// counts that matter and their sums from either end.
type sum struct {
	pmf, upTo, from []float64
}

// newSum convolves the laws of the parts.
func newSum(parts []exact.Counting) *sum {
	s := &sum{pmf: []float64{1}}
	for _, p := range parts {
		s.pmf = convolve(s.pmf, masses(p))
	}
	n := len(s.pmf)
	s.upTo, s.from = make([]float64, n), make([]float64, n)
	total := 0.0
	for i := range n {
		total += s.pmf[i]
		s.upTo[i] = min(1, total)
	}
	total = 0
	for i := n - 1; i >= 0; i-- {
		total += s.pmf[i]
		s.from[i] = min(1, total)
	}
	return s
}

// masses are the probabilities of counts from 0 on, as long as they matter.
func masses(p exact.Counting) []float64 {
	const nothing = 1e-60
	var list []float64
	for k := int64(0); ; k++ {
		m := p.PMF(k)
		if m < nothing && p.Lower(k) > 0.5 {
			return list
		}
		list = append(list, m)
	}
}

func convolve(a, b []float64) []float64 {
	c := make([]float64, len(a)+len(b)-1)
	for i, x := range a {
		for j, y := range b {
			c[i+j] += float64(x * y)
		}
	}
	return c
}

// PMF is P(X = k).
func (s *sum) PMF(k int64) float64 {
	if k < 0 || k >= int64(len(s.pmf)) {
		return 0
	}
	return s.pmf[k]
}

// Upper is P(X >= k).
func (s *sum) Upper(k int64) float64 {
	switch {
	case k <= 0:
		return 1
	case k >= int64(len(s.from)):
		return 0
	}
	return s.from[k]
}

// Lower is P(X <= k).
func (s *sum) Lower(k int64) float64 {
	switch {
	case k < 0:
		return 0
	case k >= int64(len(s.upTo)):
		return 1
	}
	return s.upTo[k]
}

// CriticalUpper is the smallest k with P(X >= k) at most limit.
func (s *sum) CriticalUpper(limit float64) (k int64, size float64, ok bool) {
	for k := range s.from {
		if exact.AtMost(s.from[k], limit) {
			return int64(k), s.from[k], true
		}
	}
	return 0, 0, false
}

// CriticalLower is the largest k with P(X <= k) at most limit.
func (s *sum) CriticalLower(limit float64) (k int64, size float64, ok bool) {
	for i := range s.upTo {
		if !exact.AtMost(s.upTo[i], limit) {
			break
		}
		k, size, ok = int64(i), s.upTo[i], true
	}
	return k, size, ok
}
