package plant

import (
	"math/rand/v2"
	"slices"

	"tailbell/config"
	"tailbell/exact/resample"
	"tailbell/monitor"
)

// plant returns the history with an excess of the ratio in it.
func (g *ground) plant(in *config.Indicator, shape Shape, ratio float64, rng *rand.Rand) []arrival {
	if ratio < 1 {
		return g.thin(shape, ratio, rng)
	}
	base := in.BaselineFor(g.series)
	var added []arrival
	for i := range g.slots {
		s := &g.slots[i]
		more := shape.ratio(ratio, i, len(g.slots)) - 1
		var n int64
		if in.Measure == config.Proportion {
			n = moreTrials(rng, s, more)
		} else {
			n = count(rng, s.mean*more, spreadOf(base))
		}
		if n > 0 {
			added = append(added, g.report(in, base, s, n, rng)...)
		}
	}
	for i := range added {
		added[i].planted = true
	}
	all := append(slices.Clone(g.base), added...)
	sortArrivals(all)
	return all
}

// moreTrials draws how many of the trials without an event get one, so that
// the chance of an event is 1+more times the usual one (at most 1).
func moreTrials(rng *rand.Rand, s *slot, more float64) int64 {
	want := min(1, s.mean*(1+more))
	if s.mean >= 1 || s.trials <= s.events {
		return 0
	}
	return resample.Binomial(rng, s.trials-s.events, (want-s.mean)/(1-s.mean))
}

// report returns the observations of n further events in a slot.
func (g *ground) report(in *config.Indicator, base *config.Baseline, s *slot, n int64, rng *rand.Rand) []arrival {
	switch {
	case s.moments:
		return onTrials(g.series, s, n, rng)
	case in.ArrivalLooks:
		return instants(g.series, s, n, rng)
	}
	late := splitDelay(base, n, rng)
	var list []arrival
	for i, k := range late {
		if k > 0 {
			at := max(s.known, (s.end - 1).Add(base.Delay.Ages[i]))
			list = append(list, arrival{at: at, o: events(g.series, s, k)})
			n -= k
		}
	}
	if n > 0 {
		list = append(list, arrival{at: s.known, o: events(g.series, s, n)})
	}
	return list
}

func events(series string, s *slot, n int64) monitor.Observation {
	return monitor.Observation{Series: series, Start: s.start, End: s.end, Events: n, HasEvents: true}
}

// instants spreads single events evenly at random over a slot.
func instants(series string, s *slot, n int64, rng *rand.Rand) []arrival {
	var list []arrival
	for range n {
		at := s.start + monitor.Instant(rng.Int64N(int64(s.end-s.start)))
		list = append(list, arrival{at: at, o: monitor.Observation{Series: series, Start: at, End: at, Instant: true, Events: 1, HasEvents: true}})
	}
	return list
}

// splitDelay draws how many of n events are reported at each age of the
// baseline's delay; nil where it has none.
func splitDelay(base *config.Baseline, n int64, rng *rand.Rand) []int64 {
	if base == nil || base.Delay == nil {
		return nil
	}
	late, before := make([]int64, len(base.Delay.Ages)), 0.0
	for i, share := range base.Delay.Reported {
		if n == 0 || before >= 1 {
			break
		}
		late[i] = resample.Binomial(rng, n, min(1, (share-before)/(1-before)))
		n -= late[i]
		before = share
	}
	return late
}

// thin keeps each event of the excess's slots with the chance of the ratio:
// the same events in all revisions of an observation.
func (g *ground) thin(shape Shape, ratio float64, rng *rand.Rand) []arrival {
	kept := map[string][]float64{}
	all := slices.Clone(g.base)
	for i := range all {
		o := &all[i].o
		at, inside := slices.BinarySearchFunc(g.slots, o.Start, func(s slot, t monitor.Instant) int {
			switch {
			case s.end <= t:
				return -1
			case s.start > t:
				return 1
			}
			return 0
		})
		if !inside || !o.HasEvents || o.Series != g.series {
			continue
		}
		chance := shape.ratio(ratio, at, len(g.slots))
		if o.ID == "" {
			o.Events = resample.Binomial(rng, o.Events, chance)
			continue
		}
		draws := kept[o.ID]
		for int64(len(draws)) < o.Events {
			draws = append(draws, rng.Float64())
		}
		kept[o.ID] = draws
		n := int64(0)
		for _, u := range draws[:o.Events] {
			if u < chance {
				n++
			}
		}
		o.Events = n
	}
	return all
}

// count draws a count with the mean, and with spread times the mean as
// variance: Poisson, or negative binomial as a Poisson count whose mean is
// itself drawn from a gamma law. Counts of one spread add up to one of it.
func count(rng *rand.Rand, mean, spread float64) int64 {
	if mean <= 0 {
		return 0
	}
	if spread > 1 {
		mean = resample.Gamma(rng, mean/(spread-1)) * (spread - 1)
	}
	return resample.Poisson(rng, mean)
}

// countTrials draws the events in n trials of one chance, beta-binomial where
// there is spread over the binomial's variance.
func countTrials(rng *rand.Rand, n int64, chance, spread float64) int64 {
	if spread > 1 && n >= 2 && chance > 0 && chance < 1 {
		spread = min(spread, 0.9*float64(n)+0.1) // as the engine takes it
		size := float64(n-1)/(spread-1) - 1
		a, b := resample.Gamma(rng, chance*size), resample.Gamma(rng, (1-chance)*size)
		chance = a / (a + b)
	}
	return resample.Binomial(rng, n, chance)
}

func spreadOf(b *config.Baseline) float64 {
	if b == nil {
		return 1
	}
	return b.Spread
}

// source is the source of random numbers of the number.
func (p *Plan) source(number uint64) *rand.Rand { return resample.Source(p.Seed, number) }
