package exact

import (
	"errors"
	"fmt"
	"math"
)

// PoissonBinomial is the law of the number of events in trials with unequal probabilities. It
// is worked out once (time and memory grow with the square and the first power of the number of
// trials) and read without allocation. Make one with NewPoissonBinomial; it is not changed
// afterwards and may be shared.
type PoissonBinomial struct {
	mass, upper, lower []scaled
	mean, sd           float64
}

// scaled is m * 2^(512 e): a probability that can't underflow.
type scaled struct {
	m float64
	e int32
}

func (a scaled) add(b scaled) scaled {
	if a.e < b.e || a.m == 0 {
		a, b = b, a
	}
	switch {
	case b.m == 0:
		return a
	case a.e == b.e:
		return scaled{a.m + b.m, a.e}
	case a.e == b.e+1:
		return scaled{a.m + b.m*0x1p-512, a.e}
	}
	return a
}

func (a scaled) mul(p float64) scaled {
	if p < 0x1p-256 { // the product may lie under what a float64 holds
		p *= 0x1p512
		a.e--
	}
	for a.m *= p; a.m < 0x1p-256 && a.m != 0; a.e-- {
		a.m *= 0x1p512
	}
	return a
}

func (a scaled) point() point {
	if a.m == 0 {
		return impossible.point
	}
	k := 512 * float64(a.e)
	h := twoSum(k*ln2Head, k*ln2Mid)
	return point{h.hi, h.lo, a.m}
}

// ErrTooManyTrials is the error of a Poisson-binomial law of more than 32768 trials.
var ErrTooManyTrials = errors.New("exact: a Poisson-binomial law takes at most 32768 trials")

// NewPoissonBinomial is the law for trials with the given probabilities, each in [0, 1].
func NewPoissonBinomial(p []float64) (*PoissonBinomial, error) {
	if len(p) > 1<<15 {
		return nil, fmt.Errorf("%w, not %d", ErrTooManyTrials, len(p))
	}
	x := &PoissonBinomial{
		mass: make([]scaled, len(p)+1), upper: make([]scaled, len(p)+1), lower: make([]scaled, len(p)+1),
	}
	x.mass[0] = scaled{1, 0}
	variance := 0.0
	for i, v := range p {
		if !(v >= 0 && v <= 1) {
			return nil, fmt.Errorf("exact: probability %d of a Poisson-binomial law is %v: give one in [0, 1]", i, v)
		}
		x.mean += v
		variance += v * (1 - v)
		for j := i + 1; j > 0; j-- {
			x.mass[j] = x.mass[j].mul(1 - v).add(x.mass[j-1].mul(v))
		}
		x.mass[0] = x.mass[0].mul(1 - v)
	}
	x.sd = math.Sqrt(variance)
	sum := scaled{}
	for j, m := range x.mass {
		sum = sum.add(m)
		x.lower[j] = sum
	}
	sum = scaled{}
	for j := len(p); j >= 0; j-- {
		sum = sum.add(x.mass[j])
		x.upper[j] = sum
	}
	return x, nil
}

func (x *PoissonBinomial) valid() bool { return len(x.mass) > 0 }

func (x *PoissonBinomial) support() (lo, hi int64) { return 0, int64(len(x.mass)) - 1 }

func (x *PoissonBinomial) spread() (mean, sd float64) { return x.mean, x.sd }

func (x *PoissonBinomial) thin(int64, bool) float64 { return 1 }

func (x *PoissonBinomial) point(k int64) point {
	switch {
	case !x.valid():
		return undefined.point
	case k < 0 || k >= int64(len(x.mass)):
		return impossible.point
	}
	return x.mass[k].point()
}

func (x *PoissonBinomial) side(k int64, upper, mid bool) side {
	top := int64(len(x.mass)) - 1
	switch {
	case !x.valid():
		return undefined
	case k < 0 || k > top:
		return outside(k < 0 == upper)
	}
	s := x.direct(k, upper, mid)
	if s.prob() <= 0.5 {
		return s
	}
	if !mid {
		if upper {
			k--
		} else {
			k++
		}
	}
	if k < 0 || k > top {
		return certain
	}
	s = x.direct(k, !upper, mid)
	s.flip = true
	return s
}

func (x *PoissonBinomial) direct(k int64, upper, mid bool) side {
	t := x.lower[k]
	if upper {
		t = x.upper[k]
	}
	s := side{point: t.point(), ratio: 1}
	if mid && t.m > 0 {
		m := x.mass[k]
		switch t.e - m.e {
		case 0:
			s.ratio = 1 - 0.5*m.m/t.m
		case 1:
			s.ratio = 1 - 0.5*m.m*0x1p-512/t.m
		}
	}
	return s
}

// PMF is P(X = k); 0 outside the support.
func (x *PoissonBinomial) PMF(k int64) float64 { return x.point(k).value() }

// LogPMF is the natural logarithm of P(X = k), -Inf outside the support.
func (x *PoissonBinomial) LogPMF(k int64) float64 { return logMass(x, k) }

// Upper is P(X >= k).
func (x *PoissonBinomial) Upper(k int64) float64 { return x.side(k, true, false).prob() }

// LogUpper is log P(X >= k), where Upper underflows as well.
func (x *PoissonBinomial) LogUpper(k int64) float64 { return x.side(k, true, false).logProb() }

// Lower is P(X <= k).
func (x *PoissonBinomial) Lower(k int64) float64 { return x.side(k, false, false).prob() }

// LogLower is log P(X <= k), where Lower underflows as well.
func (x *PoissonBinomial) LogLower(k int64) float64 { return x.side(k, false, false).logProb() }

// MidUpper is P(X > k) + P(X = k)/2 (Lancaster 1961).
func (x *PoissonBinomial) MidUpper(k int64) float64 { return x.side(k, true, true).prob() }

// LogMidUpper is the logarithm of MidUpper.
func (x *PoissonBinomial) LogMidUpper(k int64) float64 { return x.side(k, true, true).logProb() }

// MidLower is P(X < k) + P(X = k)/2 (Lancaster 1961).
func (x *PoissonBinomial) MidLower(k int64) float64 { return x.side(k, false, true).prob() }

// LogMidLower is the logarithm of MidLower.
func (x *PoissonBinomial) LogMidLower(k int64) float64 { return x.side(k, false, true).logProb() }

// CriticalUpper is the smallest k with P(X >= k) <= limit and the size attained there; ok is
// false where no count can signal. See the package's note on sizes that hit a limit exactly.
func (x *PoissonBinomial) CriticalUpper(limit float64) (k int64, size float64, ok bool) {
	return criticalUpper(x, limit)
}

// CriticalLower is the largest k with P(X <= k) <= limit and the size attained there; ok is
// false where no count can signal.
func (x *PoissonBinomial) CriticalLower(limit float64) (k int64, size float64, ok bool) {
	return criticalLower(x, limit)
}

// TwoSided is the two-sided p-value of k, at most 1.
func (x *PoissonBinomial) TwoSided(k int64, how Sides) float64 {
	return twoSided(x, k, how, false).prob()
}

// LogTwoSided is the logarithm of TwoSided, where TwoSided underflows as well.
func (x *PoissonBinomial) LogTwoSided(k int64, how Sides) float64 {
	return twoSided(x, k, how, false).logProb()
}
