package estimate

import (
	"context"
	"math"
	"math/rand/v2"

	"tailbell/exact"
	"tailbell/exact/resample"
)

type source = *rand.Rand

// PValue is the probability, given the totals, of a statistic at or past the
// observed one if the plain model holds.
type PValue struct {
	// P is exact if Exact, else that of the simulation: (past+1)/(draws+1).
	P     float64 `json:"p"`
	Exact bool    `json:"exact"`
	// Chance are the draws behind it, with Lower and Upper the exact 99 %
	// bounds of what infinitely many would give; both are P if Exact.
	Chance resample.Chance `json:"simulated,omitzero"`
	Lower  float64         `json:"p_lower"`
	Upper  float64         `json:"p_upper"`
}

func exactly(p float64) PValue {
	p = min(p, 1)
	return PValue{P: p, Exact: true, Lower: p, Upper: p}
}

// Bounds of the work that goes into one p-value.
const (
	maxProgramme  = 1_000_000_000 // steps of the programme over equal cells
	maxStates     = 4_000_000     // states that it keeps
	maxEnumerated = 1_000_000     // ways in which the events can fall
	maxSimulated  = 100_000_000   // elementary draws
	minDraws      = 200
	tie           = 1e-9 // statistics that differ by less, in proportion, are equal
)

// test returns the p-value of the observed statistic; P = 1 where nothing could
// differ.
func (t *table) test(ctx context.Context, plan resample.Plan) (PValue, error) {
	if len(t.strata) == 0 {
		return exactly(1), nil
	}
	if len(t.strata) == 1 {
		s := &t.strata[0]
		if t.ownGroups(s) && equal(s.exposure) {
			if p, ok := t.programme(s); ok {
				return exactly(p), nil
			}
		}
		if w := ways(s.total, len(s.group)); w <= maxEnumerated && w*float64(len(s.group)) <= maxProgramme {
			return exactly(t.enumerate(s)), nil
		}
	}
	return t.simulate(ctx, plan)
}

func (t *table) simulate(ctx context.Context, plan resample.Plan) (PValue, error) {
	plan.Draws = affordable(plan.Draws, t.steps())
	limit := t.statistic(t.observed) * (1 - tie)
	// The tables of the splitters are only read, so the workers share them.
	splitters := make([]splitter, len(t.strata))
	cells := 0
	for i := range t.strata {
		splitters[i] = t.splitter(&t.strata[i])
		cells = max(cells, len(t.strata[i].group))
	}
	chance, err := resample.MonteCarlo(ctx, plan, func() func(*rand.Rand) bool {
		groups, counts := make([]int64, t.groups), make([]int64, cells)
		return func(rng *rand.Rand) bool {
			clear(groups)
			for i := range t.strata {
				s := &t.strata[i]
				counts := counts[:len(s.group)]
				splitters[i].split(rng, s, counts)
				for j, g := range s.group {
					groups[g] += counts[j]
				}
			}
			return t.statistic(groups) >= limit
		}
	})
	if err != nil {
		return PValue{}, err
	}
	p := PValue{P: chance.P(), Chance: chance}
	p.Lower, p.Upper = chance.Bounds(0.01)
	return p, nil
}

// affordable reduces a number of draws to what their cost allows.
func affordable(draws int, steps int64) int {
	return min(draws, max(minDraws, int(maxSimulated/max(steps, 1))))
}

func (t *table) ownGroups(s *stratum) bool { return len(s.group) == t.groups }

func equal(x []float64) bool {
	for _, v := range x {
		if v != x[0] {
			return false
		}
	}
	return true
}

// ways is the number of ways in which n events can fall into cells, as a float.
func ways(n int64, cells int) float64 {
	w := 1.0
	for i := 1; i < cells; i++ {
		w *= float64(n+int64(i)) / float64(i)
		if w > 1e12 {
			break
		}
	}
	return w
}

// cellLaw is the distribution of a cell's events.
type cellLaw interface {
	PMF(k int64) float64
	Upper(k int64) float64
}

// law is the distribution of the events in cell j when so many are left for it
// and those after it.
func (t *table) law(s *stratum, after float64, j int, left int64) cellLaw {
	if t.proportion {
		own := int64(math.Round(s.exposure[j]))
		return exact.Hypergeometric{White: own, Black: int64(math.Round(after)) - own, Draws: left}
	}
	return exact.NewBinomial(left, min(1, s.exposure[j]/after))
}

// programme is the exact p for cells of equal exposure. There the statistic
// rises with the number of pairs of events in the same cell, sum k(k-1)/2, so
// its law is worked out cell by cell over (events so far, pairs so far). A state
// that has reached the observed pairs is past it for good: p is a sum of
// positive terms, accurate however small.
func (t *table) programme(s *stratum) (float64, bool) {
	if s.total > maxStates { // nor would an int64 hold the pairs of many more
		return 0, false
	}
	pairs := int64(0)
	for _, k := range s.events {
		pairs += k * (k - 1) / 2
	}
	if pairs == 0 {
		return 1, true
	}
	most := int64((1 + math.Sqrt(1+8*float64(pairs))) / 2)
	states := float64(s.total+1) * float64(pairs)
	if states > maxStates || states*float64(len(s.group))*float64(min(most, s.total))/3 > maxProgramme {
		return 0, false
	}
	now, next := newGrid(s.total, pairs), newGrid(s.total, pairs)
	now.at[0] = 1
	p := 0.0
	after := s.size
	past := reaching(pairs)
	for j := range s.group {
		next.clear()
		for used := range s.total + 1 {
			if row := now.row(used); !allZero(row) {
				law := t.law(s, after, j, s.total-used)
				next.advance(row, used, min(most, s.total-used), law)
				p += leaving(row, past, law)
			}
		}
		now, next = next, now
		after -= s.exposure[j]
	}
	return p, true
}

// reaching returns, for every number of pairs under the observed one, the least
// number of events in a cell that reaches it.
func reaching(pairs int64) []int64 {
	least := make([]int64, pairs)
	for have := range least {
		for k := int64(2); ; k++ {
			if int64(have)+k*(k-1)/2 >= pairs {
				least[have] = k
				break
			}
		}
	}
	return least
}

// advance adds to the grid where a row of states with so many events used goes
// when the next cell holds 0 to reach of those left.
func (g grid) advance(row []float64, used, reach int64, law cellLaw) {
	for k := range reach + 1 {
		step := k * (k - 1) / 2
		if step >= g.pairs {
			return
		}
		mass := law.PMF(k)
		to := g.row(used + k)[step:]
		for have, m := range row[:len(to)] {
			to[have] += m * mass
		}
	}
}

// leaving is the mass of a row that is past the observed pairs for good after
// the next cell; past is what reaching returns.
func leaving(row []float64, past []int64, law cellLaw) float64 {
	p, upper, k := 0.0, 0.0, int64(-1)
	for have, m := range row {
		if m == 0 {
			continue
		}
		if past[have] != k {
			k = past[have]
			upper = law.Upper(k)
		}
		p += m * upper
	}
	return p
}

// grid holds the probability of each (events, pairs).
type grid struct {
	at    []float64
	pairs int64
}

func newGrid(events, pairs int64) grid { return grid{make([]float64, (events+1)*pairs), pairs} }

func (g grid) row(events int64) []float64 { return g.at[events*g.pairs : (events+1)*g.pairs] }
func (g grid) clear()                     { clear(g.at) }

func allZero(row []float64) bool {
	for _, v := range row {
		if v != 0 {
			return false
		}
	}
	return true
}

// enumerate is the exact p by going through all ways in which the events can
// fall into the cells of the only stratum.
func (t *table) enumerate(s *stratum) float64 {
	limit := t.statistic(t.observed) * (1 - tie)
	after := make([]float64, len(s.group)+1)
	for j := len(s.group) - 1; j >= 0; j-- {
		after[j] = after[j+1] + s.exposure[j]
	}
	groups := make([]int64, t.groups)
	memo := map[[3]int64]float64{}
	pmf := func(j int, left, k int64) float64 {
		key := [3]int64{int64(j), left, k}
		v, ok := memo[key]
		if !ok {
			v = t.law(s, after[j], j, left).PMF(k)
			memo[key] = v
		}
		return v
	}
	p := 0.0
	var fall func(j int, left int64, mass float64)
	fall = func(j int, left int64, mass float64) {
		if mass == 0 {
			return
		}
		if j == len(s.group)-1 {
			if t.proportion && float64(left) > s.exposure[j] {
				return
			}
			groups[s.group[j]] = left
			if t.statistic(groups) >= limit {
				p += mass
			}
			return
		}
		for k := range left + 1 {
			groups[s.group[j]] = k
			fall(j+1, left-k, mass*pmf(j, left, k))
		}
	}
	fall(0, s.total, 1)
	return p
}
