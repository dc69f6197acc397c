package resample

import (
	"math"
	"math/rand/v2"
)

// Binomial draws the number of events in n trials of probability p: by
// inversion where few are expected, else by the transformed rejection of
// Hörmann (1993, Journal of Statistical Computation and Simulation 46).
func Binomial(rng *rand.Rand, n int64, p float64) int64 {
	switch {
	case n <= 0 || p <= 0:
		return 0
	case p >= 1:
		return n
	case p > 0.5:
		return n - Binomial(rng, n, 1-p)
	case float64(n)*p < 10:
		return invert(rng, n, p)
	}
	return reject(rng, n, p)
}

// invert walks up the distribution from 0.
func invert(rng *rand.Rand, n int64, p float64) int64 {
	odds := p / (1 - p)
	for {
		u := rng.Float64()
		mass := math.Exp(float64(n) * math.Log1p(-p))
		k := int64(0)
		for u > mass && k < n {
			u -= mass
			mass *= odds * float64(n-k) / float64(k+1)
			k++
			if mass == 0 {
				break // u lies in what rounding left over
			}
		}
		if u <= mass {
			return k
		}
	}
}

// reject is algorithm BTRS, for p <= 1/2 and n p >= 10.
func reject(rng *rand.Rand, n int64, p float64) int64 {
	nf := float64(n)
	sd := math.Sqrt(nf * p * (1 - p))
	b := 1.15 + 2.53*sd
	a := -0.0873 + 0.0248*b + 0.01*p
	c := nf*p + 0.5
	vr := 0.92 - 4.2/b
	alpha := (2.83 + 5.1/b) * sd
	lodds := math.Log(p / (1 - p))
	mode := math.Floor((nf + 1) * p)
	h := logFactorial(mode) + logFactorial(nf-mode)
	for {
		u := rng.Float64() - 0.5
		v := 1 - rng.Float64()
		us := 0.5 - math.Abs(u)
		k := math.Floor((2*a/us+b)*u + c)
		if us >= 0.07 && v <= vr {
			return int64(k)
		}
		if k < 0 || k > nf {
			continue
		}
		v = math.Log(v * alpha / (a/(us*us) + b))
		if v <= h-logFactorial(k)-logFactorial(nf-k)+(k-mode)*lodds {
			return int64(k)
		}
	}
}

func logFactorial(k float64) float64 {
	l, _ := math.Lgamma(k + 1)
	return l
}

// Splitter draws how events fall into cells in proportion to weights.
type Splitter struct {
	weights []float64
	after   []float64 // sum of the weights from i on
	accept  []float64 // alias table (Walker 1977)
	alias   []int
}

// NewSplitter returns the splitter for weights that are not negative and not
// all zero.
func NewSplitter(weights []float64) *Splitter {
	n := len(weights)
	s := &Splitter{weights: weights, after: make([]float64, n+1), accept: make([]float64, n), alias: make([]int, n)}
	for i := n - 1; i >= 0; i-- {
		s.after[i] = s.after[i+1] + weights[i]
	}
	var small, large []int
	for i, w := range weights {
		s.accept[i] = w * float64(n) / s.after[0]
		s.alias[i] = i
		if s.accept[i] < 1 {
			small = append(small, i)
		} else {
			large = append(large, i)
		}
	}
	for len(small) > 0 && len(large) > 0 {
		lo, hi := small[len(small)-1], large[len(large)-1]
		small = small[:len(small)-1]
		s.alias[lo] = hi
		s.accept[hi] -= 1 - s.accept[lo]
		if s.accept[hi] < 1 {
			large = large[:len(large)-1]
			small = append(small, hi)
		}
	}
	for _, rest := range [][]int{small, large} {
		for _, i := range rest {
			if weights[i] > 0 {
				s.accept[i] = 1
			}
		}
	}
	return s
}

// Cell draws the cell of one event.
func (s *Splitter) Cell(rng *rand.Rand) int {
	i := rng.IntN(len(s.accept))
	if rng.Float64() < s.accept[i] {
		return i
	}
	return s.alias[i]
}

// Split writes to counts how n events fall into the cells: multinomial, each
// cell with probability in proportion to its weight.
func (s *Splitter) Split(rng *rand.Rand, n int64, counts []int64) {
	clear(counts)
	if n < int64(4*len(counts)) {
		for range n {
			counts[s.Cell(rng)]++
		}
		return
	}
	for i := range counts {
		if n == 0 {
			return
		}
		p := 1.0
		if s.after[i+1] > 0 {
			p = s.weights[i] / s.after[i]
		}
		counts[i] = Binomial(rng, n, p)
		n -= counts[i]
	}
}

// Clump is Split for events that attract each other: the shares of the cells
// are themselves drawn from a Dirichlet law with parameters concentration times
// weight over the sum of weights (Dirichlet-multinomial: what negative binomial
// counts of one size per exposure are, given their total). Drawn by Hoppe's
// urn (1984). cells is scratch space for n events.
func (s *Splitter) Clump(rng *rand.Rand, n int64, concentration float64, counts []int64, cells []int) {
	clear(counts)
	for i := range int(n) {
		if i > 0 && rng.Float64()*(concentration+float64(i)) < float64(i) {
			cells[i] = cells[rng.IntN(i)]
		} else {
			cells[i] = s.Cell(rng)
		}
		counts[cells[i]]++
	}
}

// Urn draws how events fall into trials without replacement.
type Urn struct {
	trials   []int64
	total    int64
	splitter *Splitter
}

// NewUrn returns the urn for the trials of each cell, not all zero.
func NewUrn(trials []int64) *Urn {
	u := &Urn{trials: trials}
	weights := make([]float64, len(trials))
	for i, n := range trials {
		weights[i] = float64(n)
		u.total += n
	}
	u.splitter = NewSplitter(weights)
	return u
}

// Split writes to counts how n events fall into the cells, if each trial has
// at most one and all choices of n trials are alike: multivariate
// hypergeometric. n is at most the sum of the trials.
func (u *Urn) Split(rng *rand.Rand, n int64, counts []int64) {
	if 2*n > u.total {
		u.Split(rng, u.total-n, counts)
		for i := range counts {
			counts[i] = u.trials[i] - counts[i]
		}
		return
	}
	clear(counts)
	for n > 0 {
		i := u.splitter.Cell(rng)
		if rng.Int64N(u.trials[i]) >= counts[i] {
			counts[i]++
			n--
		}
	}
}

// Gamma draws from the gamma law of the given shape, positive, and scale 1
// (Marsaglia and Tsang 2000, ACM Transactions on Mathematical Software 26).
func Gamma(rng *rand.Rand, shape float64) float64 {
	if shape < 1 {
		return Gamma(rng, shape+1) * math.Pow(1-rng.Float64(), 1/shape)
	}
	d := shape - 1./3
	c := 1 / math.Sqrt(9*d)
	for {
		x := rng.NormFloat64()
		v := 1 + c*x
		if v <= 0 {
			continue
		}
		v *= v * v
		u := 1 - rng.Float64()
		if math.Log(u) < x*x/2+d-d*v+d*math.Log(v) {
			return d * v
		}
	}
}

// Poisson draws a count of the given mean, from 0 to 1e9: by counting up gaps
// where it is small, else by splitting off a gamma waiting time (Ahrens and
// Dieter 1974).
func Poisson(rng *rand.Rand, mean float64) int64 {
	n := int64(0)
	for mean > 20 {
		k := math.Floor(mean * 7 / 8)
		wait := Gamma(rng, k)
		if wait > mean {
			return n + Binomial(rng, int64(k)-1, mean/wait)
		}
		n += int64(k)
		mean -= wait
	}
	for mean -= rng.ExpFloat64(); mean > 0; mean -= rng.ExpFloat64() {
		n++
	}
	return n
}
