package plant

import (
	"fmt"

	"tailbell/config"
)

// Slots is how many slots of the given length a span such as "56d" or "12mo"
// has.
func Slots(span string, slot config.Every) (int, error) {
	e, err := config.ParseSpan(span)
	if err != nil {
		return 0, fmt.Errorf("%q is %w", span, err)
	}
	have, kind := size(e)
	one, slotKind := size(slot)
	if kind != slotKind && kind < months && slotKind < months && have%(24*60) == 0 {
		kind = slotKind // whole days
	}
	if kind != slotKind || have%one != 0 {
		return 0, fmt.Errorf("%s is no whole number of slots of %s", span, slot)
	}
	return have / one, nil
}

// The kinds of length that can't be turned into each other.
const (
	minutes = iota
	days24
	months
)

// size is a length in minutes, or in months.
func size(e config.Every) (n, kind int) {
	switch e.Unit {
	case config.Minute:
		return e.N, minutes
	case config.Hour:
		return 60 * e.N, minutes
	case config.Day:
		return 24 * 60 * e.N, days24
	case config.Week:
		return 7 * 24 * 60 * e.N, days24
	case config.Month:
		return e.N, months
	case config.Year:
		return 12 * e.N, months
	}
	return 0, minutes
}
