package plant

import (
	"math/rand/v2"
	"slices"
	"time"

	"tailbell/config"
	"tailbell/monitor"
)

// trialSlots is how many slots it takes until windows of the last trials of an
// indicator have filled and, under an allowance, their limits are known: those
// follow from four weeks.
func (v *invented) trialSlots(in *config.Indicator) int {
	slots := 0
	for i := range in.Windows {
		if w := &in.Windows[i]; w.Trials > 0 && v.how.Exposure.Coef > 0 {
			slots = max(slots, int(w.Trials/int64(v.how.Exposure.Coef))+2)
		}
	}
	if slots == 0 || in.Allowance == nil {
		return slots
	}
	cal := monitor.NewCalendar(v.in.Every, v.in.Zone)
	from := monitor.InstantOf(time.Date(2001, 1, 1, 0, 0, 0, 0, v.in.Zone))
	return slots + int(cal.Slot(from.Add(28*24*time.Hour))-cal.Slot(from)) + 1
}

// trials makes each trial of a slot an observation of its own, at a moment drawn
// evenly from the slot; those of the slot's events have one. They are alike, so it
// makes no difference which those are.
func trials(name string, s *slot, rng *rand.Rand) []arrival {
	list := make([]arrival, s.trials)
	s.moments = true
	for i := range list {
		at := s.start + monitor.Instant(rng.Int64N(int64(s.end-s.start)))
		o := monitor.Observation{Series: name, Start: at, End: at, Instant: true, HasEvents: true, HasExposure: true, Exposure: config.Decimal{Coef: 1}}
		if int64(i) < s.events {
			o.Events = 1
		} else {
			s.free = append(s.free, at)
		}
		list[i] = arrival{at: at, o: o}
	}
	return list
}

// onTrials gives n of the trials without an event one.
func onTrials(series string, s *slot, n int64, rng *rand.Rand) []arrival {
	free := slices.Clone(s.free)
	var list []arrival
	for i := range min(int(n), len(free)) {
		j := i + rng.IntN(len(free)-i)
		free[i], free[j] = free[j], free[i]
		at := free[i]
		list = append(list, arrival{at: at, o: monitor.Observation{Series: series, Start: at, End: at, Instant: true, Events: 1, HasEvents: true}})
	}
	return list
}
