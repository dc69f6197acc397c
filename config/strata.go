package config

import "time"

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
