package exact

import (
	"cmp"
	"math"
	"slices"
)

// Holm writes to out the p-values adjusted step-down for the family-wise error rate (Holm 1979,
// Scandinavian Journal of Statistics 6), valid under any dependence, and returns it; out is
// grown if needed and may be p itself. NaN p-values stay NaN and count as no test.
func Holm(out, p []float64) []float64 {
	order, out := ranked(out, p)
	m, worst := float64(len(order)), 0.0
	for i, j := range order {
		worst = max(worst, min(1, (m-float64(i))*p[j]))
		out[j] = worst
	}
	return out
}

// BenjaminiHochberg is Holm for the false discovery rate (Benjamini and Hochberg 1995, JRSS B
// 57), step-up; valid under independence and positive dependence.
func BenjaminiHochberg(out, p []float64) []float64 {
	order, out := ranked(out, p)
	m, best := float64(len(order)), 1.0
	for i := len(order) - 1; i >= 0; i-- {
		best = min(best, m/float64(i+1)*p[order[i]])
		out[order[i]] = best
	}
	return out
}

// Hochberg is Holm step-up (Hochberg 1988, Biometrika 75:800): never larger, and
// valid under independence and positive dependence.
func Hochberg(out, p []float64) []float64 {
	order, out := ranked(out, p)
	best := 1.0
	for i := len(order) - 1; i >= 0; i-- {
		best = min(best, float64(len(order)-i)*p[order[i]])
		out[order[i]] = best
	}
	return out
}

// BenjaminiYekutieli is BenjaminiHochberg under any dependence (Benjamini and
// Yekutieli 2001, Annals of Statistics 29:1165): times 1 + 1/2 + ... + 1/m.
func BenjaminiYekutieli(out, p []float64) []float64 {
	order, out := ranked(out, p)
	m, best, harmonic := float64(len(order)), 1.0, 0.0
	for i := len(order); i > 0; i-- {
		harmonic += 1 / float64(i)
	}
	for i := len(order) - 1; i >= 0; i-- {
		best = min(best, float64(harmonic*m)/float64(i+1)*p[order[i]])
		out[order[i]] = best
	}
	return out
}

// FalseCoverage returns how many of the tests Benjamini and Hochberg's procedure
// at q selects, given what BenjaminiHochberg made of their p-values, and the alpha
// of bounds for the selected ones: q times the selected share of the tests, NaN
// where none is. Of the bounds so made of what was selected, the share that
// misses is at most q on average, where plain bounds of level 1-q miss more often
// the more had to happen for them to be looked at (Benjamini and Yekutieli 2005,
// JASA 100:71). It holds for independent tests; under positive dependence for
// one-sided tests and bounds. A test is selected if its adjusted p-value is
// AtMost q; q is in (0, 1).
func FalseCoverage(adjusted []float64, q float64) (selected int, alpha float64) {
	tests := 0
	for _, v := range adjusted {
		switch {
		case math.IsNaN(v):
			continue
		case AtMost(v, q):
			selected++
		}
		tests++
	}
	if selected == 0 {
		return 0, math.NaN()
	}
	return selected, float64(selected) / float64(tests) * q
}

// ranked lists the places of the p-values in rising order, and gives out the length of p.
func ranked(out, p []float64) (order []int, grown []float64) {
	order = make([]int, 0, len(p))
	out = slices.Grow(out[:0], len(p))[:len(p)]
	for i, v := range p {
		if math.IsNaN(v) {
			out[i] = v
			continue
		}
		order = append(order, i)
	}
	slices.SortFunc(order, func(a, b int) int { return cmp.Compare(p[a], p[b]) })
	return order, out
}
