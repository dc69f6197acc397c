package exact_test

import (
	"math"
	"math/rand/v2"
	"testing"

	"tailbell/exact"
)

// TestFalseCoverage plays many tables of 40 units, some of which have more than
// usual, with independent Poisson counts. Of the bounds of those selected at
// q = 0.1 no more than a tenth may miss on average; plain 90 % bounds of the
// same do, which is why there are others.
func TestFalseCoverage(t *testing.T) {
	const seed, tables, units, mean, q = 5, 4000, 40, 4.0, 0.1
	r := rand.New(rand.NewPCG(seed, 0))
	usual := exact.Poisson{Rate: mean, Exposure: 1}
	draw := func(mean float64) (k int64) {
		for p := r.ExpFloat64(); p < mean; p += r.ExpFloat64() {
			k++
		}
		return k
	}
	type question struct {
		k     int64
		alpha float64
	}
	known := map[question][2]float64{}
	misses := func(k int64, alpha, truth float64) float64 {
		b, ok := known[question{k, alpha}]
		if !ok {
			b[0], b[1] = exact.Garwood(k, alpha)
			known[question{k, alpha}] = b
		}
		if truth < b[0] || truth > b[1] {
			return 1
		}
		return 0
	}
	adjustedSum, adjustedSquares, plainSum := 0.0, 0.0, 0.0
	var k [units]int64
	var truth, p [units]float64
	for range tables {
		for i := range units {
			truth[i] = mean
			if i%4 == 0 {
				truth[i] = mean * (1 + r.Float64()*1.5)
			}
			k[i] = draw(truth[i])
			p[i] = usual.Upper(k[i])
		}
		bh := exact.BenjaminiHochberg(nil, p[:])
		n, alpha := exact.FalseCoverage(bh, q)
		if n == 0 {
			continue
		}
		adjusted, plain := 0.0, 0.0
		for i := range units {
			if exact.AtMost(bh[i], q) {
				adjusted += misses(k[i], alpha, truth[i]) / float64(n)
				plain += misses(k[i], q, truth[i]) / float64(n)
			}
		}
		adjustedSum += adjusted
		adjustedSquares += adjusted * adjusted
		plainSum += plain
	}
	rate := adjustedSum / tables
	err := math.Sqrt(adjustedSquares/tables-rate*rate) / math.Sqrt(tables)
	t.Logf("seed %d: of adjusted bounds %.4f ± %.4f miss, of plain ones %.4f", seed, rate, err, plainSum/tables)
	if rate > q+4*err {
		t.Errorf("seed %d: %.4f ± %.4f of the adjusted bounds miss, at most %g is promised", seed, rate, err, q)
	}
	if plainSum/tables < q+4*err {
		t.Errorf("seed %d: %.4f of the plain bounds miss: the selection does no harm here", seed, plainSum/tables)
	}
}

// TestFalseCoverageAgrees holds that a unit is selected exactly if its adjusted
// central bounds leave out the baseline, where the test is the two-sided central
// one (the duality in Benjamini and Yekutieli 2005).
func TestFalseCoverageAgrees(t *testing.T) {
	const seed, q = 6, 0.1
	r := rand.New(rand.NewPCG(seed, 0))
	for range 300 {
		k, p := make([]int64, 30), make([]float64, 30)
		x := exact.Poisson{Rate: 5, Exposure: 1}
		for i := range k {
			k[i] = r.Int64N(16)
			p[i] = x.TwoSided(k[i], exact.Central)
		}
		bh := exact.BenjaminiHochberg(nil, p)
		n, alpha := exact.FalseCoverage(bh, q)
		if n == 0 {
			if !math.IsNaN(alpha) {
				t.Fatalf("seed %d: none selected, alpha %v", seed, alpha)
			}
			continue
		}
		for i := range k {
			lower, upper := exact.Garwood(k[i], alpha)
			if selected := exact.AtMost(bh[i], q); selected != (lower > 5 || upper < 5) {
				t.Fatalf("seed %d: %d events, selected %t of %d, bounds %v to %v", seed, k[i], selected, n, lower, upper)
			}
		}
	}
}
