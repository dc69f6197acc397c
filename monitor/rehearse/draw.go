package rehearse

import (
	"hash/fnv"
	"math"
	"math/rand/v2"
)

// Source returns a source of random numbers for one purpose under a seed.
// Purposes are independent: what one draws does not shift another.
func Source(seed uint64, purpose string) *rand.Rand {
	h := fnv.New64a()
	for _, c := range []byte(purpose) {
		if _, err := h.Write([]byte{c}); err != nil {
			panic(err) // a hash never fails
		}
	}
	return rand.New(rand.NewPCG(seed, h.Sum64()))
}

// Poisson draws from the Poisson distribution with mean mu >= 0, as the number
// of uniform factors whose product stays above exp(-mu) (Knuth, The Art of
// Computer Programming, volume 2, section 3.4.1). A large mean is drawn as a
// sum of small ones.
func Poisson(r *rand.Rand, mu float64) int64 {
	const chunk = 16
	var n int64
	for ; mu > chunk; mu -= chunk {
		n += poisson(r, chunk)
	}
	return n + poisson(r, mu)
}

func poisson(r *rand.Rand, mu float64) int64 {
	limit, product := math.Exp(-mu), r.Float64()
	var n int64
	for product > limit {
		product *= r.Float64()
		n++
	}
	return n
}

// Binomial draws the number of events in n trials, one by one.
func Binomial(r *rand.Rand, n int64, p float64) int64 {
	var k int64
	for range n {
		if r.Float64() < p {
			k++
		}
	}
	return k
}

// Between draws a whole number from lo to hi, both included.
func Between(r *rand.Rand, lo, hi int) int { return lo + r.IntN(hi-lo+1) }
