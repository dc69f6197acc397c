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
