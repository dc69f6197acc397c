package config

import (
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
