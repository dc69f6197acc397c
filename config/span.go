package config

import (
	"errors"
	"fmt"
	"math"
	"strconv"
	"time"
)

// Errors of ParseSpan and ParseDuration.
var (
	ErrSpanSyntax    = errors.New(`not a whole number and a unit such as "15m", "1h", "28d", "1w", "3mo" or "1y"`)
	ErrSpanRange     = errors.New("longer than can be held: a million of a unit")
	ErrNoFixedLength = errors.New("months and years have no fixed length: write days, e.g. 30d or 365d")
)

const maxSpanCount = 1_000_000

// ParseSpan reads a length of time such as "15m", "28d" or "12mo": a whole
// number from 1 to a million and one of the units m, h, d, w, mo, y.
func ParseSpan(s string) (Every, error) {
	n, unit, err := splitSpan(s)
	if err != nil {
		return Every{}, err
	}
	for u := Minute; u <= Year; u++ {
		if unit == u.String() {
			if n == 0 {
				return Every{}, ErrSpanSyntax
			}
			return Every{N: n, Unit: u}, nil
		}
	}
	return Every{}, ErrSpanSyntax
}

// ParseDuration reads an elapsed time such as "90s", "5m", "36h", "2d" or
// "1w": a whole number from 0 to a million and one of the units s, m, h, d
// (24 hours), w (7 days). "0" needs no unit.
func ParseDuration(s string) (time.Duration, error) {
	if s == "0" {
		return 0, nil
	}
	n, unit, err := splitSpan(s)
	if err != nil {
		return 0, err
	}
	var one time.Duration
	switch unit {
	case "s":
		one = time.Second
	case "m":
		one = time.Minute
	case "h":
		one = time.Hour
	case "d":
		one = 24 * time.Hour
	case "w":
		one = 7 * 24 * time.Hour
	case "mo", "y":
		return 0, ErrNoFixedLength
	default:
		return 0, ErrSpanSyntax
	}
	if int64(n) > math.MaxInt64/int64(one) {
		return 0, ErrSpanRange
	}
	return time.Duration(n) * one, nil
}

func splitSpan(s string) (n int, unit string, err error) {
	digits := 0
	for digits < len(s) && s[digits] >= '0' && s[digits] <= '9' {
		digits++
	}
	if digits == 0 || (digits > 1 && s[0] == '0') {
		return 0, "", ErrSpanSyntax
	}
	if digits > 7 {
		return 0, "", ErrSpanRange
	}
	n, err = strconv.Atoi(s[:digits])
	if err != nil {
		return 0, "", ErrSpanSyntax
	}
	if n > maxSpanCount {
		return 0, "", ErrSpanRange
	}
	return n, s[digits:], nil
}

// FormatDuration writes an elapsed time as ParseDuration reads it, in the
// largest unit that is exact.
func FormatDuration(d time.Duration) string {
	const day = 24 * time.Hour
	switch {
	case d == 0:
		return "0s"
	case d%day == 0:
		return fmt.Sprintf("%dd", d/day)
	case d%time.Hour == 0:
		return fmt.Sprintf("%dh", d/time.Hour)
	case d%time.Minute == 0:
		return fmt.Sprintf("%dm", d/time.Minute)
	case d%time.Second == 0:
		return fmt.Sprintf("%ds", d/time.Second)
	}
	return d.String()
}

// checkSlot says why e is no length of a slot, "" if it is one.
func checkSlot(e Every) string {
	switch e.Unit {
	case Minute:
		if e.N < 60 && 60%e.N == 0 {
			return ""
		}
		return "minutes must divide the hour: 1m, 2m, 3m, 4m, 5m, 6m, 10m, 12m, 15m, 20m or 30m"
	case Hour, Day, Week, Year:
		if e.N == 1 {
			return ""
		}
	case Month:
		if e.N == 1 || e.N == 3 {
			return ""
		}
	}
	return "a slot is a divisor of the hour in minutes, 1h, 1d, 1w, 1mo, 3mo or 1y"
}

// minutes returns the elapsed minutes of a span of minutes, hours, days (24
// hours) or weeks.
func (e Every) minutes() (int, bool) {
	switch e.Unit {
	case Minute:
		return e.N, true
	case Hour:
		return e.N * 60, true
	case Day:
		return e.N * 24 * 60, true
	case Week:
		return e.N * 7 * 24 * 60, true
	case Month, Year:
	}
	return 0, false
}

// shortest is the least time that the length can take: a day may have 23
// hours, a month 28 days.
func (e Every) shortest() time.Duration {
	const day = 24 * time.Hour
	n := time.Duration(e.N)
	switch e.Unit {
	case Minute:
		return n * time.Minute
	case Hour:
		return n * time.Hour
	case Day:
		return n*day - time.Hour
	case Week:
		return 7*n*day - time.Hour
	case Month:
		return 28*n*day - time.Hour
	case Year:
		return 365*n*day - time.Hour
	}
	return 0
}

// slotsOf counts a span in whole slots of an indicator. problem says why that
// can't be done.
func slotsOf(span, slot Every) (slots int, problem string) {
	have, count := 0, false
	one := slot.N
	switch slot.Unit {
	case Minute, Hour:
		have, count = span.minutes()
		if slot.Unit == Hour {
			one *= 60
		}
	case Day, Week:
		one, have, count = daySpan(span, slot)
	case Month, Year:
		if slot.Unit == Year {
			one *= 12
		}
		switch span.Unit {
		case Month:
			have, count = span.N, true
		case Year:
			have, count = span.N*12, true
		case Minute, Hour, Day, Week:
		}
	}
	switch {
	case !count:
		return 0, noCommonMeasure(span, slot)
	case have%one != 0:
		return 0, fmt.Sprintf("%s is not a whole number of slots of %s", span, slot)
	}
	return have / one, ""
}

func daySpan(span, slot Every) (one, have int, count bool) {
	one = slot.N
	if slot.Unit == Week {
		one *= 7
	}
	switch span.Unit {
	case Day:
		return one, span.N, true
	case Week:
		return one, span.N * 7, true
	case Minute, Hour, Month, Year:
	}
	return one, 0, false
}

func noCommonMeasure(span, slot Every) string {
	switch span.Unit {
	case Month, Year:
		inner := "days"
		if slot.Unit < Day {
			inner = "hours"
		}
		return fmt.Sprintf("%s has no fixed number of %s", span, inner)
	case Minute, Hour:
		if slot.Unit < Month {
			return "a day of the calendar may last 23 or 25 hours, so hours don't add up to days"
		}
	case Day, Week:
	}
	return fmt.Sprintf("a slot of %s has no fixed number of days", slot)
}
