package estimate

import (
	"cmp"
	"context"
	"fmt"
	"math"
	"slices"

	"tailbell/exact"
	"tailbell/exact/resample"
	"tailbell/monitor"
)

// Period is what one period, such as a month, does to the usual rate.
type Period struct {
	Start    monitor.Instant `json:"start"`
	Events   int64           `json:"events"`
	Exposure float64         `json:"exposure"`
	// Expected from the rate of the whole history, and the two-sided exact p
	// (central) of the period's events given the total.
	Expected float64 `json:"expected"`
	P        float64 `json:"p"`
	// Influence is how much, in proportion, the rate is higher because of this
	// period: (rate - rate without it) / rate.
	Influence float64 `json:"influence"`
	// Marked is set where P times the number of periods is under 0.05.
	Marked bool `json:"marked,omitempty"`
}

// Stability says how the usual rate hangs on the periods it was taken from.
type Stability struct {
	// Length of a period, as it is written in a set-up.
	Length  string   `json:"length"`
	Periods []Period `json:"periods"`
	// ChanceError is the standard error of the rate if counts are Poisson (or
	// binomial); JackknifeError is what leaving out periods gives, with its
	// factor (n-1)/n under the root.
	ChanceError    float64    `json:"chance_error"`
	JackknifeError float64    `json:"jackknife_error"`
	Bootstrap      *Bootstrap `json:"bootstrap,omitempty"`
	// NoBootstrap says why there is none.
	NoBootstrap string `json:"no_bootstrap,omitempty"`
}

// Bootstrap is the moving-block bootstrap of the rate over periods. Blocks wrap
// around: else the periods at the ends, drawn more rarely, bend the BCa interval.
type Bootstrap struct {
	Draws      int        `json:"draws"`
	Block      int        `json:"block"`
	Error      float64    `json:"error"`
	Percentile [2]float64 `json:"percentile"`
	// BCa is the bias-corrected and accelerated interval; zero where it does
	// not exist.
	BCa [2]float64 `json:"bca,omitzero"`
}

// periods sums a series by period.
func (h *History) periods(s *Series) (string, []Period) {
	every := periodOf(h.Indicator, h.From, h.To)
	cal := monitor.NewCalendar(every, h.Indicator.Zone)
	var all []Period
	last := int64(math.MinInt64)
	for _, slot := range s.Slots {
		if n := cal.Slot(slot.Start); n != last {
			last = n
			all = append(all, Period{Start: max(cal.Start(n), h.From)})
		}
		p := &all[len(all)-1]
		p.Events += slot.Events
		p.Exposure += slot.Exposure
	}
	return every.String(), all
}

// Excess is a period of one series with more, or fewer, events than its own
// rate explains: P times the number of all periods of all series is under 0.05.
type Excess struct {
	Series string `json:"series"`
	Period
}

// excesses returns them, the least probable first; Influence is that on the
// series' own rate.
func (h *History) excesses() []Excess {
	var all []Excess
	tests := 0
	for i := range h.Series {
		s := &h.Series[i]
		events, exposure := s.events(), s.exposure()
		_, periods := h.periods(s)
		if events == 0 || len(periods) < 2 {
			continue
		}
		tests += len(periods)
		for _, p := range periods {
			p.Expected = float64(events) / exposure * p.Exposure
			p.P = h.periodP(&p, events, exposure)
			if rest := exposure - p.Exposure; rest > 0 {
				p.Influence = 1 - float64(events-p.Events)/rest*exposure/float64(events)
			}
			all = append(all, Excess{s.Name, p})
		}
	}
	found := all[:0]
	for _, x := range all {
		if x.Marked = x.P*float64(tests) < 0.05; x.Marked {
			found = append(found, x)
		}
	}
	slices.SortStableFunc(found, func(a, b Excess) int { return cmp.Compare(a.P, b.P) })
	return found
}

func rateOf(periods []Period) resample.Statistic {
	return func(positions []int) float64 {
		events, exposure := int64(0), 0.0
		for _, i := range positions {
			events += periods[i].Events
			exposure += periods[i].Exposure
		}
		return float64(events) / exposure
	}
}

// stability judges the periods; block 0 means the cube root of their number.
func (h *History) stability(ctx context.Context, plan resample.Plan, block int) (*Stability, error) {
	s := &Stability{}
	sum := h.summed()
	s.Length, s.Periods = h.periods(&sum)
	events, exposure := int64(0), 0.0
	for _, p := range s.Periods {
		events += p.Events
		exposure += p.Exposure
	}
	n := len(s.Periods)
	if n < 2 || events == 0 {
		return s, nil
	}
	rate := float64(events) / exposure
	s.ChanceError = math.Sqrt(float64(events)) / exposure
	if h.proportion() {
		s.ChanceError = math.Sqrt(rate * (1 - rate) / exposure)
	}
	for i := range s.Periods {
		p := &s.Periods[i]
		p.Expected = rate * p.Exposure
		p.P = h.periodP(p, events, exposure)
		p.Marked = p.P*float64(n) < 0.05
	}
	j, err := resample.Jackknife(resample.Singles(n), rateOf(s.Periods))
	if err != nil {
		return s, nil //nolint:nilerr // a single period holds all exposure: there is nothing to leave out
	}
	s.JackknifeError = j.Error()
	for i := range s.Periods {
		s.Periods[i].Influence = (j.Estimate - j.Without[i]) / j.Estimate
	}
	if block == 0 {
		block = int(math.Ceil(math.Cbrt(float64(n))))
	}
	if s.NoBootstrap = noBootstrap(s.Periods, block); s.NoBootstrap == "" {
		s.Bootstrap, err = h.bootstrap(ctx, plan, s.Periods, block)
	}
	return s, err
}

// periodP is the exact p of a period's events given the total.
func (h *History) periodP(p *Period, events int64, exposure float64) float64 {
	if h.proportion() {
		own := int64(math.Round(p.Exposure))
		return exact.Hypergeometric{White: own, Black: int64(math.Round(exposure)) - own, Draws: events}.TwoSided(p.Events, exact.Central)
	}
	return exact.NewBinomial(events, p.Exposure/exposure).TwoSided(p.Events, exact.Central)
}

const leastPeriods = 8 // under which a bootstrap says nothing

// noBootstrap says why the periods can't be drawn in such blocks, "" if they can.
func noBootstrap(periods []Period, block int) string {
	n := len(periods)
	switch {
	case n < leastPeriods:
		return fmt.Sprintf("%d periods are fewer than %d", n, leastPeriods)
	case block > n/2:
		return fmt.Sprintf("%d periods allow blocks of %d at most, not of %d", n, n/2, block)
	case slices.ContainsFunc(periods, func(p Period) bool { return p.Exposure == 0 }):
		return "a period is without exposure, and a redraw might have none at all"
	}
	return ""
}

func (h *History) bootstrap(ctx context.Context, plan resample.Plan, periods []Period, block int) (*Bootstrap, error) {
	n := len(periods)
	plan.Draws = affordable(plan.Draws, int64(n))
	statistic := rateOf(periods)
	r, err := resample.Bootstrap(ctx, plan, resample.Blocks{Periods: n, Length: block, Wrap: true}, statistic)
	if err != nil {
		return nil, err
	}
	b := &Bootstrap{Draws: plan.Draws, Block: block, Error: r.Error()}
	alpha := h.Indicator.Alpha
	b.Percentile[0], b.Percentile[1] = r.Percentile(alpha)
	j, err := resample.Jackknife(resample.Runs(n, block), statistic)
	if err != nil {
		return b, nil //nolint:nilerr // without an acceleration there is no BCa interval, and none is shown
	}
	if lower, upper, err := r.BCa(alpha, resample.Acceleration(j.Influence())); err == nil {
		b.BCa = [2]float64{lower, upper}
	}
	return b, nil
}
