package estimate

import (
	"context"
	"math"
	"math/rand/v2"

	"tailbell/exact"
	"tailbell/exact/resample"
)

// Spread says how much more counts vary than chance alone makes them.
type Spread struct {
	// Slots is how many slots were summed to one count, Length the same as it
	// would be written in a set-up; Counts is how many counts there are, Events
	// their sum.
	Slots  int    `json:"slots"`
	Length string `json:"length"`
	Counts int    `json:"counts"`
	Events int64  `json:"events"`
	// Statistic is Pearson's, Mean its mean under chance alone (the number of
	// counts less one for each series, for a rate), Phi their quotient:
	// variance over mean, or over the binomial variance. 0 where the events
	// tell nothing.
	Statistic float64 `json:"statistic"`
	Mean      float64 `json:"mean"`
	Phi       float64 `json:"phi"`
	// Chance is the p-value of so much spread or more.
	Chance PValue `json:"chance"`
	// Bound is the upper 95 % bound of phi if counts are negative binomial
	// (beta-binomial for a proportion) with the same phi everywhere; 0 where
	// it was not worked out or, with Unbounded, the events can't bound it. It
	// errs upwards by the error of BoundDraws simulated draws.
	Bound      float64 `json:"bound,omitempty"`
	Unbounded  bool    `json:"unbounded,omitempty"`
	BoundDraws int     `json:"bound_draws,omitempty"`
}

// blocks sums slots into blocks of so many, from the first slot on.
func (s *Series) blocks(slots int) (events []int64, exposure []float64) {
	last := int64(math.MinInt64)
	for i := range s.Slots {
		x := &s.Slots[i]
		block := (x.Number - s.Slots[0].Number) / int64(slots)
		if block != last {
			events, exposure = append(events, 0), append(exposure, 0)
			last = block
		}
		events[len(events)-1] += x.Events
		exposure[len(exposure)-1] += x.Exposure
	}
	return events, exposure
}

// spreadTable has a group for every block of every series.
func spreadTable(proportion bool, series []Series, slots int) *table {
	var strata []stratum
	groups := 0
	for i := range series {
		var s stratum
		s.events, s.exposure = series[i].blocks(slots)
		for range s.events {
			s.group = append(s.group, groups)
			groups++
		}
		strata = append(strata, s)
	}
	return newTable(proportion, groups, strata)
}

func (t *table) spread(ctx context.Context, plan resample.Plan, bound bool) (Spread, error) {
	s := Spread{Events: t.events(), Statistic: t.statistic(t.observed), Mean: t.mean()}
	for i := range t.strata {
		s.Counts += len(t.strata[i].group)
	}
	if s.Mean > 0 {
		s.Phi = s.Statistic / s.Mean
	}
	var err error
	if s.Chance, err = t.test(ctx, plan); err != nil || !bound {
		return s, err
	}
	s.Bound, s.BoundDraws, err = t.boundSpread(ctx, plan)
	if math.IsInf(s.Bound, 1) {
		s.Bound, s.Unbounded = 0, true
	}
	return s, err
}

// Phi beyond maxPhi is called unbounded.
const (
	maxPhi     = 1000
	boundDraws = 1000
	boundLevel = 0.05
)

// boundSpread returns the phi at which a statistic as small as the observed one
// has probability boundLevel; at every phi tried the upper 99 % bound of that
// probability is taken, so that the error of the simulation makes phi larger.
// It is infinite where even maxPhi is possible, 0 where it would take too long.
func (t *table) boundSpread(ctx context.Context, plan resample.Plan) (phi float64, draws int, err error) {
	const tries = 12 // to within half a per cent of phi - 1
	plan.Draws = min(plan.Draws, boundDraws)
	cost := t.steps()
	if !t.proportion { // the urn draws event by event
		cost = t.events()
	}
	if len(t.strata) == 0 {
		return math.Inf(1), 0, nil
	}
	if affordable(plan.Draws*tries, cost) < plan.Draws*tries {
		return 0, 0, nil
	}
	observed := t.statistic(t.observed) * (1 + tie)
	possible := func(phi float64) (bool, error) {
		chance, err := resample.MonteCarlo(ctx, plan, func() func(*rand.Rand) bool {
			redraw := t.spreading(phi)
			return func(rng *rand.Rand) bool { return redraw(rng) <= observed }
		})
		if err != nil {
			return false, err
		}
		_, upper := exact.ClopperPearson(chance.Past, chance.Draws, 0.02)
		return upper >= boundLevel, nil
	}
	low, high := math.Log(1e-3), math.Log(maxPhi-1) // of phi - 1
	if ok, err := possible(maxPhi); err != nil || ok {
		return math.Inf(1), plan.Draws, err
	}
	for range tries {
		mid := (low + high) / 2
		ok, err := possible(1 + math.Exp(mid))
		if err != nil {
			return 0, 0, err
		}
		if ok {
			low = mid
		} else {
			high = mid
		}
	}
	return 1 + math.Exp(high), plan.Draws, nil
}

// spreading returns a draw of the statistic if every count has that phi.
func (t *table) spreading(phi float64) func(*rand.Rand) float64 {
	if t.proportion {
		return t.spreadingTrials(phi)
	}
	groups := make([]int64, t.groups)
	splitters := make([]*resample.Splitter, len(t.strata))
	var counts []int64
	var cells []int
	for i := range t.strata {
		s := &t.strata[i]
		splitters[i] = resample.NewSplitter(s.exposure)
		counts = append(counts, make([]int64, max(0, len(s.group)-len(counts)))...)
		cells = append(cells, make([]int, max(0, int(s.total)-len(cells)))...)
	}
	return func(rng *rand.Rand) float64 {
		for i := range t.strata {
			s := &t.strata[i]
			counts := counts[:len(s.group)]
			// Negative binomial counts with this phi have sizes mean/(phi-1).
			splitters[i].Clump(rng, s.total, float64(s.total)/(phi-1), counts, cells)
			for j, g := range s.group {
				groups[g] = counts[j]
			}
		}
		return t.statistic(groups)
	}
}

// spreadingTrials draws beta-binomial counts at the estimated proportions; the
// statistic is then formed around the proportions of the draw.
func (t *table) spreadingTrials(phi float64) func(*rand.Rand) float64 {
	var counts []int64
	return func(rng *rand.Rand) float64 {
		sum := 0.0
		for i := range t.strata {
			s := &t.strata[i]
			counts = append(counts[:0], make([]int64, len(s.group))...)
			q := s.drawSpread(rng, phi, counts)
			if q <= 0 || q >= 1 {
				return math.Inf(1)
			}
			for j, n := range s.exposure {
				d := float64(counts[j]) - n*q
				sum += d * d / (n * q * (1 - q))
			}
		}
		return sum
	}
}

// drawSpread draws the counts of a stratum with that phi and returns their
// proportion. Draws that are all or none tell nothing of spread and can't be
// what was observed, so they are made again, some times.
func (s *stratum) drawSpread(rng *rand.Rand, phi float64, counts []int64) float64 {
	p, q := float64(s.total)/s.size, 0.0
	for range 100 {
		total := int64(0)
		for j, n := range s.exposure {
			counts[j] = resample.Binomial(rng, int64(math.Round(n)), spreadChance(rng, p, n, phi))
			total += counts[j]
		}
		if q = float64(total) / s.size; q > 0 && q < 1 {
			break
		}
	}
	return q
}

// spreadChance draws the proportion of a count of n trials so that its variance
// is phi times the binomial one; for n no greater than phi it is all or none.
func spreadChance(rng *rand.Rand, p, n, phi float64) float64 {
	if n <= phi || n <= 1 {
		if rng.Float64() < p {
			return 1
		}
		return 0
	}
	size := (n - phi) / (phi - 1)
	a, b := resample.Gamma(rng, size*p), resample.Gamma(rng, size*(1-p))
	if a+b == 0 {
		return spreadChance(rng, p, 1, phi)
	}
	return a / (a + b)
}
