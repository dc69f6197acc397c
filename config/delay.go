package config

import (
	"fmt"
	"sort"
	"time"
)

// At returns the share of a slot's events that is known at an age after its
// end: the share of the greatest of Ages that has been reached, 0 before the
// first. It is 1 for nil, and never falls.
func (d *Delay) At(age time.Duration) float64 {
	if d == nil {
		return 1
	}
	i := sort.Search(len(d.Ages), func(i int) bool { return d.Ages[i] > age })
	if i == 0 {
		return 0
	}
	return d.Reported[i-1]
}

const maxDelaySteps = 1000

// readDelay reads the distribution of how late events are reported.
func (s section) readDelay() *Delay {
	if !s.has("delay") {
		return nil
	}
	t := s.sub("delay")
	t.strict("delay")
	ages, sound := t.readAges()
	shares, ok := t.numbers("reported", maxDelaySteps, 1e-9, 1)
	if !sound || !ok {
		return nil
	}
	if len(ages) != len(shares) {
		t.fault("reported", fmt.Sprintf("has %d shares for %d ages", len(shares), len(ages)), "give each age the share of events that is known at it")
		return nil
	}
	for i := 1; i < len(ages); i++ {
		if ages[i] <= ages[i-1] {
			t.add(t.node.fields["ages"].items[i], t.item("ages", i), "is not greater than the age before it", "write ages in order")
			ok = false
		}
		if shares[i] < shares[i-1] {
			t.add(t.node.fields["reported"].items[i], t.item("reported", i), "is less than the share before it: what is known once stays known",
				"give the share known by that age in all, not in the step alone")
			ok = false
		}
	}
	if last := shares[len(shares)-1]; last != 1 {
		t.fault("reported", "does not end at 1: by the last age every event that will ever be known is known", "add an age with the share 1")
		ok = false
	}
	if !ok {
		return nil
	}
	return &Delay{Ages: ages, Reported: shares}
}

func (s section) readAges() (ages []time.Duration, ok bool) {
	items, given := s.list("ages", maxDelaySteps)
	ok = len(items) > 0
	if !given {
		s.fault("ages", "is missing: how long after the end of their slot are events known?", `write e.g. ages = ["0d", "1d", "7d"]`)
	}
	for i, n := range items {
		age, sound := s.durationOf(n, s.item("ages", i), 0, maxTime)
		ok = ok && sound
		ages = append(ages, age)
	}
	return ages, ok
}

// last is the age by which every event is known.
func (d *Delay) last() time.Duration { return d.Ages[len(d.Ages)-1] }
