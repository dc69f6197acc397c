package resample

import (
	"context"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"
)

// Blocks says how a redraw of consecutive periods is put together.
type Blocks struct {
	// Periods is how many there are, Length how many stay together: 1 is the
	// ordinary bootstrap.
	Periods, Length int
	// Wrap lets a block go on at the beginning when it reaches the end, so
	// that all periods are drawn equally often (Politis and Romano 1992);
	// without it, as Künsch (1989, Annals of Statistics 17) has it, those at
	// the ends are drawn more rarely.
	Wrap bool
}

// ErrBlocks is returned for blocks that do not fit the periods.
var ErrBlocks = errors.New("resample: a block has from 1 to all periods, and there are two periods at least")

func (b Blocks) draw(rng *rand.Rand, positions []int) {
	starts := b.Periods - b.Length + 1
	if b.Wrap {
		starts = b.Periods
	}
	for i := 0; i < b.Periods; i += b.Length {
		start := rng.IntN(starts)
		for j := i; j < min(i+b.Length, b.Periods); j++ {
			positions[j] = (start + j - i) % b.Periods
		}
	}
}

// Redrawn is a bootstrap distribution.
type Redrawn struct {
	// Estimate is that of the data, Values are those of the redraws, sorted.
	Estimate float64
	Values   []float64
}

// Bootstrap works the statistic out on redraws of the data in blocks.
// ErrUndefined if it is NaN or infinite for some.
func Bootstrap(ctx context.Context, plan Plan, blocks Blocks, s Statistic) (*Redrawn, error) {
	if blocks.Periods < 2 || blocks.Length < 1 || blocks.Length > blocks.Periods {
		return nil, ErrBlocks
	}
	all := make([]int, blocks.Periods)
	for i := range all {
		all[i] = i
	}
	r := &Redrawn{Estimate: s(all), Values: make([]float64, max(plan.Draws, 0))}
	err := plan.each(ctx, func() func(*rand.Rand, int, int) {
		positions := make([]int, blocks.Periods)
		return func(rng *rand.Rand, from, to int) {
			for i := from; i < to; i++ {
				blocks.draw(rng, positions)
				r.Values[i] = s(positions)
			}
		}
	})
	if err != nil {
		return nil, err
	}
	undefined := 0
	for _, v := range r.Values {
		if !finite(v) {
			undefined++
		}
	}
	if undefined > 0 || !finite(r.Estimate) {
		return nil, fmt.Errorf("%w: %d of %d", ErrUndefined, undefined, len(r.Values))
	}
	slices.Sort(r.Values)
	return r, nil
}

func (r *Redrawn) mean() float64 {
	sum := 0.0
	for _, v := range r.Values {
		sum += v
	}
	return sum / float64(len(r.Values))
}

// Error is the standard error: the standard deviation of the values, with
// divisor n-1.
func (r *Redrawn) Error() float64 {
	mean, sum := r.mean(), 0.0
	for _, v := range r.Values {
		sum += (v - mean) * (v - mean)
	}
	return math.Sqrt(sum / float64(len(r.Values)-1))
}

// Bias is the mean of the values less the estimate.
func (r *Redrawn) Bias() float64 { return r.mean() - r.Estimate }

// Quantile is the value below which a share p of the distribution lies,
// interpolated on the normal scale (Davison and Hinkley 1997, Bootstrap
// Methods, equation 5.8). Past the ends it is the least or the greatest value.
func (r *Redrawn) Quantile(p float64) float64 {
	n := len(r.Values)
	rank := float64(n+1) * p
	k := int(math.Floor(rank))
	switch {
	case math.IsNaN(p):
		return math.NaN()
	case k < 1:
		return r.Values[0]
	case k >= n:
		return r.Values[n-1]
	case rank == float64(k):
		return r.Values[k-1]
	}
	low, high := quantile(float64(k)/float64(n+1)), quantile(float64(k+1)/float64(n+1))
	share := (quantile(p) - low) / (high - low)
	return r.Values[k-1] + share*(r.Values[k]-r.Values[k-1])
}

// Percentile is the percentile interval at level 1-alpha (Efron 1979).
func (r *Redrawn) Percentile(alpha float64) (lower, upper float64) {
	return r.Quantile(alpha / 2), r.Quantile(1 - alpha/2)
}

// BCa is the bias-corrected and accelerated interval at level 1-alpha (Efron
// 1987, JASA 82), with the acceleration of an influence (Acceleration). Values
// equal to the estimate count half, since counts make many. ErrUndefined where
// all values lie on one side of the estimate.
func (r *Redrawn) BCa(alpha, acceleration float64) (lower, upper float64, err error) {
	below := 0.0
	for _, v := range r.Values {
		switch {
		case v < r.Estimate:
			below++
		case v == r.Estimate:
			below += 0.5
		}
	}
	z0 := quantile(below / float64(len(r.Values)))
	at := func(p float64) float64 {
		z := z0 + quantile(p)
		return r.Quantile(normal(z0 + z/(1-acceleration*z)))
	}
	lower, upper = at(alpha/2), at(1-alpha/2)
	if !finite(z0) || !finite(lower) || !finite(upper) {
		return 0, 0, ErrUndefined
	}
	return lower, upper, nil
}

// quantile and normal are those of the standard normal distribution.
func quantile(p float64) float64 { return math.Sqrt2 * math.Erfinv(2*p-1) }
func normal(z float64) float64   { return math.Erfc(-z/math.Sqrt2) / 2 }
