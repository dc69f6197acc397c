package exact

import (
	"fmt"
	"math"
)

// Sides says which counts on the other side are as extreme as the one seen.
type Sides int

const (
	// Central doubles the smaller tail: coherent with the central bounds.
	Central Sides = iota
	// MinLike adds every count that is no more probable (Sterne 1954; Fisher, Freeman, Halton).
	MinLike
	// Blaker adds the largest opposite tail that is no larger (Blaker 2000).
	Blaker
)

func (s Sides) String() string {
	switch s {
	case Central:
		return "central"
	case MinLike:
		return "minlike"
	case Blaker:
		return "blaker"
	}
	return fmt.Sprintf("sides(%d)", int(s))
}

// ParseSides reads what String writes.
func ParseSides(s string) (Sides, error) {
	for _, v := range []Sides{Central, MinLike, Blaker} {
		if s == v.String() {
			return v, nil
		}
	}
	return 0, fmt.Errorf("exact: two-sided form %q: give central, minlike or blaker", s)
}

// tie is the difference of logarithms under which two probabilities count as equal; the
// computed ones differ from the true by 1e-16 to 1e-15.
const tie = 3e-14

// minus is log(p/q).
func (p point) minus(q point) float64 {
	if p.root == 0 || q.root == 0 {
		return p.log() - q.log()
	}
	return dd{p.hi, p.lo}.add(dd{-q.hi, -q.lo}).addFloat(logOf(p.root / q.root)).float()
}

// pair is the sum of a tail and the tail opposite to it.
type pair struct {
	own, other side
	all        bool // everything counts
	double     bool // twice own
}

func (p pair) prob() float64 {
	switch {
	case p.all:
		return 1
	case p.double:
		return min(1, 2*p.own.prob())
	}
	return min(1, p.own.prob()+p.other.prob())
}

func (p pair) logProb() float64 {
	switch {
	case p.all:
		return 0
	case p.double:
		return min(0, p.own.logProb()+math.Ln2)
	}
	if v := p.own.prob() + p.other.prob(); v > 0x1p-900 {
		return min(0, logOf(v))
	}
	a, b := p.own.logProb(), p.other.logProb()
	if a < b {
		a, b = b, a
	}
	if math.IsInf(b, -1) {
		return a
	}
	return a + log1pOf(expTwo(b-a, 0))
}

func twoSided[L law](x L, k int64, how Sides, mid bool) pair {
	if !x.valid() || k > maxCount {
		return pair{own: undefined, double: true}
	}
	if how == MinLike {
		return minLike(x, k)
	}
	own, other := x.side(k, true, mid), x.side(k, false, mid)
	upper := own.logProb() <= other.logProb()
	if !upper {
		own = other
	}
	if how == Central {
		return pair{own: own, double: true}
	}
	return blaker(x, k, own, upper)
}

func blaker[L law](x L, k int64, own side, upper bool) pair {
	t := own.logProb() + tie
	lo, hi := x.support()
	mean, _ := x.spread()
	joins := func(j int64) bool { return x.side(j, !upper, false).logProb() <= t }
	var j int64
	if upper {
		j = outward(k, lo-1, 2*mean-float64(k), joins)
	} else {
		j = outward(k, hi+1, 2*mean-float64(k), joins)
	}
	return pair{own: own, other: within(x, j, !upper)}
}

func minLike[L law](x L, k int64) pair {
	lo, hi := x.support()
	if k < lo || k > hi {
		return pair{own: impossible}
	}
	p := x.point(k)
	mean, _ := x.spread()
	joins := func(j int64) bool { return x.point(j).minus(p) <= tie }
	switch {
	case k < hi && x.point(k+1).minus(p) > tie: // below the mode
		j := outward(k, hi+1, 2*mean-float64(k), joins)
		return pair{own: x.side(k, false, false), other: within(x, j, true)}
	case k > lo && x.point(k-1).minus(p) > tie:
		j := outward(k, lo-1, 2*mean-float64(k), joins)
		return pair{own: x.side(k, true, false), other: within(x, j, false)}
	}
	return pair{all: true}
}

// outward finds the first count from near (exclusive) towards far for which within holds; far
// itself, one past the support, holds by definition.
func outward(near, far int64, guess float64, within func(int64) bool) int64 {
	sign := int64(1)
	if far < near {
		sign = -1
	}
	// in steps d from near: not within at 0, within at last
	no, yes := int64(0), (far-near)*sign
	d := clampCount(math.Abs(guess-float64(near)), 1, yes)
	for step := int64(1); yes-no > 1; {
		d = max(no+1, min(yes-1, d))
		if within(near + sign*d) {
			yes = d
			d -= step
		} else {
			no = d
			d += step
		}
		if step *= 2; yes-no <= step {
			step = 1
			d = no + (yes-no)/2
		}
	}
	return near + sign*yes
}

// within is the tail at j, empty where j is one past the support.
func within[L law](x L, j int64, upper bool) side {
	if lo, hi := x.support(); j < lo || j > hi {
		return impossible
	}
	return x.side(j, upper, false)
}
