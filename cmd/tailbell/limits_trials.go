package main

import (
	"errors"
	"fmt"
	"math"
	"slices"

	"tailbell/config"
	"tailbell/monitor/estimate"
)

// isTrials reports a window of the last so many trials.
func isTrials(w config.Window) bool { return w.Trials > 0 }

// checkTrials refuses windows of a described series that are never looked at.
func checkTrials(in *config.Indicator) error {
	trials, proportion := slices.ContainsFunc(in.Windows, isTrials), in.Measure == config.Proportion
	spans := slices.ContainsFunc(in.Windows, func(w config.Window) bool { return !isTrials(w) })
	switch {
	case trials && !proportion:
		return errors.New("a window of trials is for a proportion: say --trials in place of --exposure")
	case trials && !in.ArrivalLooks:
		return errors.New("the last trials are looked at when events come: say --looks arrival, or slot,arrival beside windows of time")
	case proportion && in.ArrivalLooks && !trials:
		return errors.New(`of a proportion the last so many trials are looked at when events come: say e.g. --window "200 trials"`)
	case proportion && spans && !in.SlotLooks:
		return errors.New("windows of time of a proportion are looked at when slots have settled: add slot to --looks")
	}
	return nil
}

// busiest is how many trials a slot brings on average in the busiest four weeks of
// those inside the horizon, as the engine plans for; 0 without windows of trials.
func busiest(in *config.Indicator, s *estimate.Series) float64 {
	if !slices.ContainsFunc(in.Windows, isTrials) || len(s.Slots) == 0 {
		return 0
	}
	const year = 365.2425
	block := max(1, int(math.Round(in.Every.PerYear()*28/year)))
	horizon := max(block, int(in.Every.PerYear()*in.Horizon.Hours()/24/year))
	slots := s.Slots[max(0, len(s.Slots)-horizon):]
	block = min(block, len(slots))
	var sum, most float64
	for i := range slots {
		if sum += slots[i].Exposure; i >= block {
			sum -= slots[i-block].Exposure
		}
		most = max(most, sum)
	}
	return most / float64(block)
}

// trials says how many trials are counted with.
func (p *limitsPage) trials(g *limitsGroup) {
	q := g.questions[g.chosen]
	if !slices.ContainsFunc(g.in.Windows, isTrials) {
		return
	}
	volume, busy := q.Plan.Volume, ", as many as in the busiest four weeks within the horizon"
	if volume == 0 {
		volume, busy = q.Plan.Exposure, ""
	}
	p.line("windows of trials: %s %s a year%s, taken to come one at a time", thousands(int64(math.Round(volume*q.Plan.SlotsPerYear))), g.in.Unit, busy)
}

// trialsOf reads a window such as "200 trials".
func trialsOf(text string) (config.Window, error) {
	n, ok := config.ParseTrials(text)
	if !ok {
		return config.Window{}, fmt.Errorf(`--window %q: write e.g. "200 trials"`, text)
	}
	return config.Window{Name: text, Step: 1, Trials: n}, nil
}
