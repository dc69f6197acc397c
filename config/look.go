package config

import (
	"fmt"
	"math/big"
	"strconv"
)

// usualLimit is the p-value of a signal unless said otherwise.
const usualLimit = 0.001

// readLook reads when a look signals and when an alert has returned.
func (s section) readLook(in *Indicator) {
	in.Upper, in.Lower = s.readTails()
	in.SlotLooks, in.ArrivalLooks = s.readLooks()
	s.checkArrival(in)
	s.checkTrials(in)
	if !s.has("allowance") {
		in.PLimit = usualLimit
	}
	if p, given, ok := s.number("p_limit"); given && ok {
		in.PLimit, _ = p.Float64()
		if in.PLimit < 1e-300 || in.PLimit >= 0.5 {
			s.fault("p_limit", strconv.FormatFloat(in.PLimit, 'g', -1, 64)+" is not greater than 0 and less than 0.5", "a usual limit is 0.001")
		}
	}
	quiet, _ := s.whole("quiet", 7, 1, maxSlots)
	in.Quiet = int(quiet)
	in.Alpha = s.readAlpha()
}

func (s section) readTails() (upper, lower bool) {
	items, given := s.list("tails", 2)
	if !given {
		return true, false
	}
	for i, n := range items {
		key := s.item("tails", i)
		if n.kind != textKind {
			s.wrongKind(n, key, textKind)
			continue
		}
		tail, ok := s.wordOf(n, key, []string{"upper", "lower"})
		switch {
		case !ok:
		case tail == 0 && upper, tail == 1 && lower:
			s.add(n, key, fmt.Sprintf("%q stands twice", n.text), "keep one")
		case tail == 0:
			upper = true
		default:
			lower = true
		}
	}
	return upper, lower
}

// readAlpha returns one minus the confidence level, computed in decimal: a
// level of 0.95 gives the number nearest to 0.05.
func (s section) readAlpha() float64 {
	const usual = 0.05
	if s.has("level") && s.has("alpha") {
		s.fault("alpha", "says the same as level", "keep one: level = 0.95 is alpha = 0.05")
		return usual
	}
	key := "level"
	if s.has("alpha") {
		key = "alpha"
	}
	v, given, ok := s.number(key)
	if !given || !ok {
		return usual
	}
	alpha := v
	if key == "level" {
		alpha = new(big.Rat).Sub(big.NewRat(1, 1), v)
	}
	if alpha.Cmp(big.NewRat(1, 1_000_000_000)) < 0 || alpha.Cmp(big.NewRat(1, 2)) > 0 {
		if key == "level" {
			s.fault(key, "is not between 0.5 and 0.999999999", "a usual level is 0.95")
		} else {
			s.fault(key, "is not between 0.000000001 and 0.5", "a usual alpha is 0.05")
		}
		return usual
	}
	f, _ := alpha.Float64()
	return f
}

// readLooks reads when looks are made: one word, or a list of them.
func (s section) readLooks() (slot, arrival bool) {
	items := []*node{s.node.fields["looks"]}
	key := func(int) string { return s.key("looks") }
	switch {
	case items[0] == nil:
		return true, false
	case items[0].kind != textKind:
		items, _ = s.list("looks", 2)
		key = func(i int) string { return s.item("looks", i) }
	}
	for i, n := range items {
		if n.kind != textKind {
			s.wrongKind(n, key(i), textKind)
			continue
		}
		look, ok := s.wordOf(n, key(i), []string{"slot", "arrival"})
		switch {
		case !ok:
		case look == 0 && slot, look == 1 && arrival:
			s.add(n, key(i), fmt.Sprintf("%q stands twice", n.text), "keep one")
		case look == 0:
			slot = true
		default:
			arrival = true
		}
	}
	return slot, arrival
}

// checkArrival refuses arrival looks where the span that ends at an event
// can't be known exactly.
func (s section) checkArrival(in *Indicator) {
	if !in.ArrivalLooks {
		return
	}
	if in.Events != Each {
		s.fault("looks", "arrival looks need the moment of each event, and counts are reported for whole slots", `write events = "each", or looks = "slot"`)
	}
	switch unit := in.Every.Unit; {
	case in.Measure == Proportion: // its last trials have no length
	case unit == Month, unit == Year:
		s.fault("looks", "a span that ends at an event has a fixed length, and months and years have none", `write e.g. every = "1d" and windows in days, or looks = "slot"`)
	}
	for i := range in.Windows {
		if w := &in.Windows[i]; w.Step > 1 && !in.SlotLooks {
			s.fault("windows", fmt.Sprintf("%q has a step, and without looks at slots it is looked at when events come alone", w.Name), `leave the step out, or add "slot" to looks`)
			break
		}
	}
	if in.Measure == Rate && in.Exposure == Reported {
		s.fault("looks", "arrival looks need exposure at every moment, and it is reported for whole slots",
			`write exposure = "clock" or "census", or looks = "slot"`)
	}
	switch {
	case !in.Upper:
		s.fault("looks", "arrival looks watch for more events than usual, and tails asks for fewer only", `write looks = "slot"`)
	case in.Lower && !in.SlotLooks:
		s.fault("looks", "the lower tail is never looked at: no event arrives that could make a count too low", `add "slot" to looks, or leave the lower tail out`)
	}
}
