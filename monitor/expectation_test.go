package monitor

import (
	"math"
	"math/rand/v2"
	"testing"
)

// TestOutwards rounds to the powers of the eighth root of 2 around two numbers.
func TestOutwards(t *testing.T) {
	const seed = 3
	t.Logf("seed %d", seed)
	rng := rand.New(rand.NewPCG(seed, 1))
	for i := range 5000 {
		x := math.Exp2(40*rng.Float64() - 20)
		if i%2 == 0 {
			x = math.Exp2(float64(rng.IntN(40) - 20)) // kept as it is, up and down
		}
		up, down := outwards(x, x)
		above, below := math.Exp2(math.Ceil(8*math.Log2(x)-1e-9)/8), math.Exp2(math.Floor(8*math.Log2(x)+1e-9)/8)
		if math.Abs(up-above) > 1e-14*above || math.Abs(down-below) > 1e-14*below || up < x*(1-1e-11) || down > x*(1+1e-11) {
			t.Errorf("%v: up %v, down %v, not %v and %v", x, up, down, above, below)
		}
		if i%2 == 0 && (up != x || down != x) {
			t.Errorf("%v became %v and %v", x, up, down)
		}
	}
}

// TestLeastMean compares the least mean of neighbours with all of them.
func TestLeastMean(t *testing.T) {
	list := []float64{4, 1, 2, 7, 0.5, 0.5, 9}
	for n, want := range map[int]float64{1: 0.5, 2: 0.5, 3: 7.0 / 3, 7: 24.0 / 7, 8: 24.0 / 7} {
		if got := leastMean(list, n); math.Abs(got-want) > 1e-15 {
			t.Errorf("%d: %v, want %v", n, got, want)
		}
	}
}
