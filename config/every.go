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

// perYear is how many such lengths there are in a year of 365.2425 days.
func (e Every) perYear() float64 {
	const day = 365.2425
	n := float64(e.N)
	switch e.Unit {
	case Minute:
		return day * 1440 / n
	case Hour:
		return day * 24 / n
	case Day:
		return day / n
	case Week:
		return day / 7 / n
	case Month:
		return 12 / n
	case Year:
		return 1 / n
	}
	return 0
}

// longestHours is the greatest number of hours that the length can take: a day
// may have 25, a month 31 days.
func (e Every) longestHours() float64 {
	n := float64(e.N)
	switch e.Unit {
	case Minute:
		return n / 60
	case Hour:
		return n
	case Day:
		return n*24 + 1
	case Week:
		return n*24*7 + 1
	case Month:
		return n * 24 * 31
	case Year:
		return n * 24 * 366
	}
	return 0
}
