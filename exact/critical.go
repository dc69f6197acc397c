package exact

import "math"

// tail is what a search over counts needs.
type tail interface {
	side(k int64, upper, mid bool) side
	spread() (mean, sd float64) // roughly: they only start the search
	support() (lo, hi int64)
	valid() bool
	// thin is the share of P(X = k) by which the tail at k falls to the next count outward:
	// 1 but for laws whose total moves with the count.
	thin(k int64, upper bool) float64
}

// law is a tail with the probability of each count.
type law interface {
	tail
	point(k int64) point
}

// logMass is log P(X = k); of a count that holds most of the probability, through the others.
func logMass[L law](x L, k int64) float64 {
	l := x.point(k).log()
	if l > -0.5 {
		return log1pOf(-(x.side(k-1, false, false).prob() + x.side(k+1, true, false).prob()))
	}
	return l
}

// logMassByEnds is logMass of a law whose probability at an end of its support is an exponential
// as it stands.
func logMassByEnds[L law](x L, k int64) float64 {
	if p := x.point(k); p.root == 1 {
		return p.log()
	}
	return logMass(x, k)
}

// atLimit is the relative room within which a size counts as at the limit: rounding must not
// lose a size that hits its limit exactly (five of five at 1/2 against 1/32).
const atLimit = 1 + 0x1p-48

// AtMost reports whether a tail probability is at most the limit, with the same
// room for rounding as critical counts have: a count signals under it if and
// only if it has reached its critical count.
func AtMost(p, limit float64) bool { return p <= limit*atLimit }

func criticalUpper[L tail](x L, limit float64) (int64, float64, bool) {
	return critical(x, limit, true)
}

func criticalLower[L tail](x L, limit float64) (int64, float64, bool) {
	return critical(x, limit, false)
}

// critical finds the least extreme count whose tail is at or under limit, by Newton steps on
// log P (concave in the count for these laws: a step never falls short) kept inside a bracket.
// For the lower tail the search runs over j = -k.
func critical[L tail](x L, limit float64, upper bool) (int64, float64, bool) {
	if !x.valid() || !(limit > 0) {
		return 0, math.NaN(), false
	}
	lo, hi := x.support()
	mean, sd := x.spread()
	z := math.Sqrt(-2 * logOf(min(limit, 1)))
	sign := int64(1)
	start := mean + z*sd + z*z/6 + 1
	if !upper {
		sign, lo, hi = -1, -hi, -lo
		start = -mean + z*sd - z*z/6
	}
	if limit >= 1 {
		return sign * lo, 1, true
	}
	target := logOf(limit)
	j := clampCount(start, lo, hi)
	below, above := lo-1, hi+1 // the tail exceeds limit at below, not at above
	var size float64
	for round := 0; above-below > 1; round++ {
		s := x.side(sign*j, upper, false)
		if p := s.prob(); AtMost(p, limit) {
			above, size = j, p
		} else {
			below = j
		}
		if math.IsNaN(s.hi) {
			return 0, math.NaN(), false
		}
		next := float64(below) + math.Floor(float64(above-below)/2)
		if thin := x.thin(sign*j, upper); round < 12 && !s.flip && s.ratio > thin && thin > 0 {
			step := math.Ceil((s.logProb() - target) / -math.Log1p(-thin/s.ratio))
			next = float64(j) + step
			if j == above && step > -1 {
				next = float64(j) - 1
			}
		} else if above > hi && round < 60 {
			next = float64(j) + (sd+1)*float64(int64(1)<<min(round, 50))
		}
		j = clampCount(next, below+1, above-1)
	}
	if above > hi {
		return 0, 0, false
	}
	return sign * above, size, true
}

func clampCount(x float64, lo, hi int64) int64 {
	switch {
	case !(x > float64(lo)):
		return lo
	case x >= float64(hi):
		return hi
	}
	return int64(x)
}
