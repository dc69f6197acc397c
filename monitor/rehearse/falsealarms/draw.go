package falsealarms

import (
	"math"
	"math/rand/v2"

	"tailbell/monitor/rehearse"
)

// Count draws a count with the mean and the spread, its variance over its mean
// (1 or more): Poisson, or negative binomial as a Poisson number of clusters
// whose sizes follow the logarithmic series (M. H. Quenouille, "A relation
// between the logarithmic, Poisson, and negative binomial series", Biometrics 5
// (1949), 162-164). Sums of such counts of one spread are of the same kind.
func Count(r *rand.Rand, mean, spread float64) int64 {
	if spread <= 1 {
		return rehearse.Poisson(r, mean)
	}
	clusters := rehearse.Poisson(r, mean/(spread-1)*math.Log(spread))
	var n int64
	for range clusters {
		n += series(r, 1-1/spread)
	}
	return n
}

// series draws from the logarithmic series: P(j) = -q^j / (j ln(1-q)).
func series(r *rand.Rand, q float64) int64 {
	u, p := r.Float64(), -q/math.Log1p(-q)
	j := int64(1)
	for u > p && j < 10_000 {
		u -= p
		p *= q * float64(j) / float64(j+1)
		j++
	}
	return j
}
