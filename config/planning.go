package config

import "fmt"

// PerYear is how many such lengths there are in a year of 365.2425 days.
func (e Every) PerYear() float64 { return e.perYear() }

// SlotsIn counts a span in whole slots. The error says why that can't be done.
func SlotsIn(span, slot Every) (int, error) {
	if problem := checkSlot(slot); problem != "" {
		return 0, fmt.Errorf("%s: %s", slot, problem)
	}
	n, problem := slotsOf(span, slot)
	if problem != "" {
		return 0, fmt.Errorf("%s", problem)
	}
	return n, nil
}
