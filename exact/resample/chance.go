package resample

import (
	"context"
	"math/rand/v2"

	"tailbell/exact"
)

// Chance is a p-value found by simulation: so many of the draws lay at or past
// what was observed.
type Chance struct {
	Past  int64 `json:"past"`
	Draws int64 `json:"draws"`
}

// P is (past+1)/(draws+1): a p-value that keeps its level for any number of
// draws, because what was observed is one draw more under the hypothesis
// (Barnard 1963; Davison and Hinkley 1997, section 4.2).
func (c Chance) P() float64 { return float64(c.Past+1) / float64(c.Draws+1) }

// Share is the unbiased estimate past/draws of the exact p-value.
func (c Chance) Share() float64 { return float64(c.Past) / float64(c.Draws) }

// Bounds are exact bounds at level 1-alpha of the p-value that infinitely many
// draws would give (Clopper and Pearson 1934).
func (c Chance) Bounds(alpha float64) (lower, upper float64) {
	return exact.ClopperPearson(c.Past, c.Draws, alpha)
}

// MonteCarlo counts the draws for which the function is true. newDraw is called
// once for every worker and may hold scratch space.
func MonteCarlo(ctx context.Context, plan Plan, newDraw func() func(*rand.Rand) bool) (Chance, error) {
	past := make([]int64, max(0, plan.Draws+chunkSize-1)/chunkSize)
	err := plan.each(ctx, func() func(*rand.Rand, int, int) {
		draw := newDraw()
		return func(rng *rand.Rand, from, to int) {
			for range to - from {
				if draw(rng) {
					past[from/chunkSize]++
				}
			}
		}
	})
	if err != nil {
		return Chance{}, err
	}
	c := Chance{Draws: int64(plan.Draws)}
	for _, n := range past {
		c.Past += n
	}
	return c, nil
}
