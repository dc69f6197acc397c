package falsealarms

import (
	"math"
	"slices"

	"tailbell/exact"
)

// Study says how much is simulated.
type Study struct {
	Draws int // histories for each seed
	Years int // that a history lasts
	Seeds []uint64
}

// Outcome is how many false alerts a year there were, history by history.
type Outcome struct {
	years int
	// counts are the alerts of each history, by seed.
	counts [][]int
}

func (s Study) outcomes(tests int) []Outcome {
	list := make([]Outcome, tests)
	for i := range list {
		list[i] = Outcome{years: s.Years, counts: make([][]int, len(s.Seeds))}
		for j := range s.Seeds {
			list[i].counts[j] = make([]int, s.Draws)
		}
	}
	return list
}

// Means returns the mean of each seed, in alerts a year.
func (o *Outcome) Means() []float64 {
	var list []float64
	for _, counts := range o.counts {
		sum := 0
		for _, n := range counts {
			sum += n
		}
		list = append(list, float64(sum)/float64(len(counts)*o.years))
	}
	return list
}

// all are the counts of all seeds, in order of size.
func (o *Outcome) all() []int {
	list := slices.Concat(o.counts...)
	slices.Sort(list)
	return list
}

// Mean returns the mean over all histories, in alerts a year, and its standard
// error.
func (o *Outcome) Mean() (mean, err float64) {
	all := o.all()
	n, sum, squares := float64(len(all)), 0.0, 0.0
	for _, k := range all {
		sum += float64(k)
	}
	for _, k := range all {
		squares += (float64(k) - sum/n) * (float64(k) - sum/n)
	}
	return sum / n / float64(o.years), math.Sqrt(squares/(n-1)/n) / float64(o.years)
}

// Quantile returns the quantile over all histories, in alerts a year, with
// bounds of at least 95 % confidence: those order statistics between which so
// many or so few of the histories lie below it (binomial).
func (o *Outcome) Quantile(q float64) (at, lower, upper float64) {
	all := o.all()
	n := int64(len(all))
	years := float64(o.years)
	at = float64(all[min(n-1, int64(math.Ceil(q*float64(n)))-1)]) / years
	x := exact.NewBinomial(n, q)
	if k, _, ok := x.CriticalLower(0.025); ok {
		lower = float64(all[k]) / years
	}
	upper = math.Inf(1)
	if k, _, ok := x.CriticalUpper(0.025); ok && k <= n {
		upper = float64(all[k-1]) / years
	}
	return at, lower, upper
}

// Learned is what the tests made of histories under one size of reference.
type Learned struct {
	// Usual is how many events the reference holds on average.
	Usual               float64
	PlugIn, Conditional Outcome
}

// Learned compares three tests of histories at a rate that brings so many
// events into a window: one that knows the rate, one that takes for it the
// estimate from a reference, and the one that is conditional on the reference.
// Each history has a reference of its own, as long as brings so many events on
// average; one without events is taken as half an event where it must be a rate.
func (x *Bench) Learned(s Study, mean float64, usual ...float64) (known Outcome, learned []Learned) {
	rate := mean / window
	list := s.outcomes(1 + 2*len(usual))
	for j, seed := range s.Seeds {
		each(s.Draws, func(i int) {
			r := source(seed, "learned", i)
			counts := history(r, s.Years, rate, 1)
			list[0].counts[j][i] = x.Alerts(Baseline{Rate: rate}, counts)
			for k, u := range usual {
				days := math.Round(u / rate)
				events := Count(r, rate*days, 1)
				list[1+2*k].counts[j][i] = x.Alerts(Baseline{Rate: max(float64(events), 0.5) / days}, counts)
				list[2+2*k].counts[j][i] = x.Alerts(Baseline{Events: events, Days: uint64(days)}, counts)
			}
		})
	}
	for k, u := range usual {
		learned = append(learned, Learned{u, list[1+2*k], list[2+2*k]})
	}
	return list[0], learned
}

// Spread compares the Poisson test with that of the right spread, both of which
// know the rate, over histories that are spread.
func (x *Bench) Spread(s Study, mean, spread float64) (poisson, right Outcome) {
	rate := mean / window
	list := s.outcomes(2)
	for j, seed := range s.Seeds {
		each(s.Draws, func(i int) {
			counts := history(source(seed, "spread", i), s.Years, rate, spread)
			list[0].counts[j][i] = x.Alerts(Baseline{Rate: rate}, counts)
			list[1].counts[j][i] = x.Alerts(Baseline{Rate: rate, Spread: spread}, counts)
		})
	}
	return list[0], list[1]
}
