package allowance

import (
	"slices"
	"strconv"
	"time"

	"tailbell/config"
)

// For is the plan of a series of an indicator under a baseline, whose slots have
// an exposure (a number of trials) that varies by so much: see Plan.Exposure and
// Plan.Vary. events in seen (weighted by strata and delay) are what a trailing or
// peers baseline counted; for the others they mean nothing. PerYear is that of
// one series: where the allowance is for the whole indicator, the caller sets it
// (Share, Newborn). It and Starts are 0 under a p_limit.
func For(in *config.Indicator, b *config.Baseline, events int64, seen, exposure, vary float64) (Plan, error) {
	p := Plan{
		Law:      Law{Proportion: in.Measure == config.Proportion, Margin: b.Margin, Spread: b.Spread},
		Exposure: exposure, Vary: vary,
		Upper: in.Upper, Lower: in.Lower, Level: in.Alpha, SlotsPerYear: in.Every.PerYear(),
	}
	switch b.Kind {
	case config.Known:
		p.Law.Rate = b.Rate
	case config.Reference:
		p.Law.Estimated, p.Law.Events = true, b.Events
		var err error
		if p.Law.Exposure, err = strconv.ParseFloat(b.Exposure.String(), 64); err != nil {
			return p, fault("a reference's exposure of %s", b.Exposure)
		}
	case config.Trailing, config.Peers:
		p.Law.Estimated, p.Law.Events, p.Law.Exposure = true, events, seen
	}
	for i := range in.Windows {
		w := &in.Windows[i]
		x := Window{Slots: w.Slots, Step: w.Step, Slot: in.SlotLooks, Arrival: in.ArrivalLooks && in.Upper, Trials: w.Trials}
		if p.Law.Proportion {
			x.Slot, x.Arrival = x.Slot && w.Trials == 0, x.Arrival && w.Trials > 0
		}
		p.Windows = append(p.Windows, x)
	}
	p.Cycle, p.Known = cycle(in.Every, b.Strata), known(in, b.Delay)
	if len(p.Cycle) > longestCycle {
		p.coarsen()
	}
	if a := in.Allowance; a != nil {
		p.PerYear, p.Starts, p.Assurance = a.PerYear(), a.Every.PerYear(), a.Assurance
	}
	return p, nil
}

// coarsen plans for the range of a cycle's factors instead of their order.
func (p *Plan) coarsen() {
	low, high := slices.Min(p.Cycle), slices.Max(p.Cycle)
	p.Cycle = nil
	if p.Law.Proportion { // then no more than the size of the looks can be said
		p.Vary = max(p.Vary, 0.9)
		return
	}
	middle := (low + high) / 2
	p.Vary = max(float64(high/middle*(1+p.Vary))-1, 1-float64(low/middle*(1-p.Vary)))
	p.Exposure *= middle
}

// longestCycle is how many slots a cycle may have before only the range of its
// factors is planned for.
const longestCycle = 2016

// cycle lists the factors of the slots of a week, or of a year of 365 days; nil
// for none.
func cycle(every config.Every, strata *config.Strata) []float64 {
	if strata == nil {
		return nil
	}
	if strata.By == config.ByMonth && every.Unit == config.Month {
		return slices.Clone(strata.Factors)
	}
	days, perDay := 7, 1
	if strata.By == config.ByMonth {
		days = 365
	}
	switch every.Unit {
	case config.Minute:
		perDay = 24 * 60 / every.N
	case config.Hour:
		perDay = 24
	case config.Day, config.Week, config.Month, config.Year:
	}
	monday := time.Date(2001, 1, 1, 0, 0, 0, 0, time.UTC)
	list := make([]float64, days*perDay)
	for i := range list {
		list[i] = strata.At(monday.Add(time.Duration(i) * 24 * time.Hour / time.Duration(perDay)))
	}
	return list
}

// known lists the shares of slots that are known at a look, by their age.
func known(in *config.Indicator, delay *config.Delay) []float64 {
	if delay == nil {
		return nil
	}
	var list []float64
	for age := in.Settle; ; age += length(in.Every) {
		share := delay.At(age)
		if share == 1 || len(list) == most {
			return list
		}
		list = append(list, share)
	}
}

// length is the mean length of a slot.
func length(every config.Every) time.Duration {
	return time.Duration(365.2425 * 24 * float64(time.Hour) / every.PerYear())
}
