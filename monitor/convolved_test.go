package monitor

import (
	"math"
	"math/rand/v2"
	"testing"

	"tailbell/exact"
)

// enumerated sums the chances of all combinations of the parts' counts.
func enumerated(parts []independent, sizes []int64, k int64) (upper, lower float64) {
	var walk func(i int, sum int64, chance float64)
	walk = func(i int, sum int64, chance float64) {
		if i == len(parts) {
			if sum >= k {
				upper += chance
			}
			if sum <= k {
				lower += chance
			}
			return
		}
		for j := range sizes[i] + 1 {
			walk(i+1, sum+j, chance*parts[i].PMF(j))
		}
	}
	walk(0, 0, 1)
	return upper, lower
}

func sameTail(a, b float64) bool { return math.Abs(a-b) <= 1e-12*max(a, b) }

func TestConvolvedByEnumeration(t *testing.T) {
	const seed = 20260401
	t.Logf("seed %d", seed)
	r := rand.New(rand.NewPCG(seed, 1))
	for range 60 {
		var c convolved
		var sizes []int64
		total := int64(0)
		for range 1 + r.IntN(4) {
			n, theta, spread := int64(1+r.IntN(12)), math.Pow(10, -4*r.Float64()), 1.0
			if r.IntN(2) == 0 {
				spread += 3 * r.Float64() // more than some of these can have
			}
			theta = min(theta, 0.97)
			c.parts = append(c.parts, partOf(n, theta, spread))
			c.mean += float64(n) * theta
			sizes = append(sizes, n)
			total += n
		}
		for k := int64(-1); k <= total+1; k++ {
			upper, lower := enumerated(c.parts, sizes, k)
			if got := c.Upper(k); !sameTail(got, min(upper, 1)) && !sameTail(got, upper) {
				t.Errorf("%+v: P(X >= %d) = %g, enumerated %g", c.parts, k, got, upper)
			}
			if got := c.Lower(k); !sameTail(got, lower) {
				t.Errorf("%+v: P(X <= %d) = %g, enumerated %g", c.parts, k, got, lower)
			}
		}
	}
}

// A sum of binomials of one probability is a binomial, down to where its tail
// has hardly a number.
func TestConvolvedOfEqualBinomials(t *testing.T) {
	for _, x := range []struct {
		sizes []int64
		theta float64
		ks    []int64
	}{
		{[]int64{100, 200, 300}, 0.01, []int64{1, 6, 20, 60, 100}},
		{[]int64{16_000, 24_000}, 0.02, []int64{600, 800, 900}}, // no mass at zero in a float64
		{[]int64{7, 7, 7, 7, 7, 7}, 0.5, []int64{1, 21, 42}},
	} {
		var c convolved
		n := int64(0)
		for _, size := range x.sizes {
			c.parts = append(c.parts, partOf(size, x.theta, 1))
			n += size
		}
		c.mean = float64(n) * x.theta
		one := exact.NewBinomial(n, x.theta)
		for _, k := range x.ks {
			if got, want := c.LogUpper(k), one.LogUpper(k); math.Abs(got-want) > 1e-11 {
				t.Errorf("%v, %g: ln P(X >= %d) = %.15g, one binomial has %.15g", x.sizes, x.theta, k, got, want)
			}
			if got, want := c.LogLower(k), one.LogLower(k); math.Abs(got-want) > 1e-11 {
				t.Errorf("%v, %g: ln P(X <= %d) = %.15g, one binomial has %.15g", x.sizes, x.theta, k, got, want)
			}
		}
		for _, limit := range []float64{0.05, 1e-3, 1e-7} {
			k, size, ok := c.CriticalUpper(limit)
			wantK, wantSize, wantOK := one.CriticalUpper(limit)
			if k != wantK || ok != wantOK || !sameTail(size, wantSize) {
				t.Errorf("%v, upper, %g: %d, %g, %v; one binomial has %d, %g, %v", x.sizes, limit, k, size, ok, wantK, wantSize, wantOK)
			}
			k, size, ok = c.CriticalLower(limit)
			wantK, wantSize, wantOK = one.CriticalLower(limit)
			if ok != wantOK || (ok && (k != wantK || !sameTail(size, wantSize))) {
				t.Errorf("%v, lower, %g: %d, %g, %v; one binomial has %d, %g, %v", x.sizes, limit, k, size, ok, wantK, wantSize, wantOK)
			}
		}
	}
}

// The variance of a part is so many times the binomial's.
func TestPartHasItsSpread(t *testing.T) {
	for _, x := range []struct{ n, theta, spread, want float64 }{
		{40, 0.08, 2, 2}, {365, 0.3, 1.2, 1.2}, {3, 0.1, 2.5, 2.5}, {3, 0.1, 5, 2.8}, {2, 0.5, 2, 1.9}, {1, 0.2, 3, 1}, {10, 0.5, 1, 1},
	} {
		p := partOf(int64(x.n), x.theta, x.spread)
		mean, square := 0.0, 0.0
		for k := range int64(x.n) + 1 {
			mean += float64(k) * p.PMF(k)
			square += float64(k*k) * p.PMF(k)
		}
		variance := square - mean*mean
		if want := x.want * x.n * x.theta * (1 - x.theta); math.Abs(mean-x.n*x.theta) > 1e-12*x.n || math.Abs(variance-want) > 1e-10*want {
			t.Errorf("%+v: mean %g, variance %g; want %g, %g", x, mean, variance, x.n*x.theta, want)
		}
	}
}

func BenchmarkConvolved(b *testing.B) {
	for _, x := range []struct {
		name        string
		slots       int
		n, k        int64
		theta, over float64
	}{
		{"28 slots, 20 events", 28, 40, 20, 0.01, 1.5},
		{"90 slots, 200 events", 90, 100, 200, 0.02, 1.5},
		{"168 slots, 1000 events", 168, 100_000, 1000, 5e-5, 1.5},
	} {
		b.Run(x.name, func(b *testing.B) {
			c := convolved{mean: x.theta * float64(x.n) * float64(x.slots)}
			for i := range x.slots {
				c.parts = append(c.parts, partOf(x.n+int64(i%7), x.theta, x.over))
			}
			for b.Loop() {
				c.Upper(x.k)
			}
		})
	}
}
