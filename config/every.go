package config

import "fmt"

// Unit is a unit of calendar or elapsed time.
type Unit int

// The units of time. Minutes and hours are elapsed time; the others follow
// the calendar of a zone.
const (
	Minute Unit = iota
	Hour
	Day
	Week
	Month
	Year
)

// String returns the unit as it is written in a set-up: m, h, d, w, mo, y.
func (u Unit) String() string {
	switch u {
	case Minute:
		return "m"
	case Hour:
		return "h"
	case Day:
		return "d"
	case Week:
		return "w"
	case Month:
		return "mo"
	case Year:
		return "y"
	}
	return fmt.Sprintf("Unit(%d)", int(u))
}

// Every is the length of a slot: a divisor of the hour in minutes, 1h, 1d,
// 1w, 1mo, 3mo or 1y.
type Every struct {
	N    int
	Unit Unit
}

// String returns the length as it is written in a set-up, e.g. "3mo".
func (e Every) String() string { return fmt.Sprintf("%d%s", e.N, e.Unit) }
