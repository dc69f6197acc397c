package planning

import (
	"math"
	"math/rand/v2"
	"slices"

	"tailbell/monitor/allowance"
)

// slotsOf is how many slots a window takes to fill.
func (q *Question) slotsOf(w allowance.Window) int {
	if w.Trials == 0 {
		return w.Slots
	}
	return int(math.Ceil(float64(w.Trials) / q.volume()))
}

// volume is how many trials a slot has where courses are simulated.
func (q *Question) volume() float64 {
	if q.Plan.Volume > 0 {
		return q.Plan.Volume
	}
	return q.Plan.Exposure
}

// trialsBefore is how many trials come before a slot: as evenly as whole numbers
// can.
func (w *walk) trialsBefore(slot int) int64 { return int64(float64(slot) * w.q.volume()) }

// trialsIn is how many a slot has.
func (w *walk) trialsIn(slot int) int64 {
	if w.q.Plan.Volume == 0 {
		return int64(w.q.Plan.Exposure)
	}
	return w.trialsBefore(slot+1) - w.trialsBefore(slot)
}

// place says which of the slot's trials were the events: any are as likely (Floyd's
// sample without replacement; Bentley and Floyd 1987, CACM 30:754-757).
func (w *walk) place(rng *rand.Rand, slot int, events int64) {
	n, base, from := w.trialsIn(slot), w.trialsBefore(slot), len(w.places)
	for last := n - events; last < n; last++ {
		at := base + rng.Int64N(last+1)
		if slices.Contains(w.places[from:], at) {
			at = base + last
		}
		w.places = append(w.places, at)
	}
	slices.Sort(w.places[from:])
}

// amongLast reports whether k events lie among the last so many trials that end
// with an event of slot t.
func (w *walk) amongLast(k, trials int64, t int) bool {
	for n := len(w.places) - 1; n >= 0 && w.places[n] >= w.trialsBefore(t); n-- {
		if first := n - int(k) + 1; first >= 0 && w.places[first] > w.places[n]-trials {
			return true
		}
	}
	return false
}
