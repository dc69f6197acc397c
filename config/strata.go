package config

import (
	"fmt"
	"slices"
	"time"
)

// Index returns the number, from 0, of the stratum that a local time lies in.
func (st *Strata) Index(local time.Time) int {
	monday := (int(local.Weekday()) + 6) % 7
	switch st.By {
	case ByHourOfWeek:
		return monday*24 + local.Hour()
	case ByWeekday:
		return monday
	case ByMonth:
		return int(local.Month()) - 1
	}
	return 0
}

// At returns the factor of the slot that begins at a local time (in the
// indicator's zone). It is 1 for nil.
func (st *Strata) At(local time.Time) float64 {
	if st == nil {
		return 1
	}
	return st.Factors[st.Index(local)]
}

// strataWords are the words for each way to tell strata apart.
var strataWords = []string{"hour-of-week", "weekday", "month"}

// strataCounts is the number of strata for each of strataWords.
var strataCounts = []int{168, 7, 12}

// String returns the way as it is written in a set-up.
func (by StrataBy) String() string {
	switch by {
	case ByHourOfWeek, ByWeekday, ByMonth:
		return strataWords[by]
	}
	return fmt.Sprintf("StrataBy(%d)", int(by))
}

// readStrata reads the factors by the time of week or year.
func (s section) readStrata(in *Indicator) *Strata {
	if !s.has("strata") {
		return nil
	}
	t := s.sub("strata")
	t.strict("strata")
	by, ok := t.word("by", 0, strataWords...)
	if !t.has("by") {
		t.fault("by", "is missing: by what are the strata told apart?", "write "+quoteOr(strataWords))
		ok = false
	}
	factors, sound := t.numbers("factors", 1000, 1e-6, 1e6)
	if !ok || !sound {
		return nil
	}
	st := Strata{By: StrataBy(by), Factors: factors}
	if want := strataCounts[by]; len(factors) != want {
		first := map[StrataBy]string{ByHourOfWeek: "Monday 00:00", ByWeekday: "Monday", ByMonth: "January"}[st.By]
		t.fault("factors", fmt.Sprintf("are %d, and by %s there are %d", len(factors), st.By, want), "write them all, from "+first+" on")
		return nil
	}
	if in.Every.N > 0 && !st.within(in.Every) {
		t.fault("by", fmt.Sprintf("a slot of %s may lie in more than one stratum by %s", in.Every, st.By), "take longer strata, or shorter slots")
	}
	return &st
}

// within reports whether every slot lies in one stratum.
func (st *Strata) within(slot Every) bool {
	switch st.By {
	case ByHourOfWeek:
		return slot.Unit <= Hour
	case ByWeekday:
		return slot.Unit <= Day
	case ByMonth:
		return slot.Unit <= Day || slot == Every{1, Month}
	}
	return false
}

// mean is the mean of the factors, each stratum counting alike.
func (st *Strata) mean() float64 {
	sum := 0.0
	for _, f := range st.Factors {
		sum += f
	}
	return sum / float64(len(st.Factors))
}

// greatest is the greatest proportion that the factors, which multiply the
// odds, make of a usual one; for nil it is that one.
func (st *Strata) greatest(usual float64) float64 {
	if st == nil {
		return usual
	}
	odds := slices.Max(st.Factors) * usual / (1 - usual)
	return odds / (1 + odds)
}
