package words

import (
	"fmt"
	"strconv"
	"strings"
	"sync"
	"time"

	"tailbell/config"
	"tailbell/monitor/life"
)

// zones remembers the zones that were loaded, by name.
var zones sync.Map

// zoneOf is the record's zone; one that the embedded data lack is read as UTC.
func zoneOf(r *life.Record) *time.Location {
	if known, ok := zones.Load(r.Zone); ok {
		if zone, ok := known.(*time.Location); ok {
			return zone
		}
	}
	zone, err := config.LoadZone(r.Zone)
	if err != nil {
		return time.UTC
	}
	zones.Store(r.Zone, zone)
	return zone
}

// day is a date without its time of day: "3 March 2026".
func day(t time.Time) string { return t.Format("2 January 2006") }

// stamp is a date and time of day for a heading.
func stamp(t time.Time) string { return t.Format("Mon 2 Jan 2006 ") + clock(t) }

// moment is a date, with the time of day unless that is midnight.
func moment(t time.Time) string {
	if midnight(t) {
		return day(t)
	}
	return clock(t) + " on " + day(t)
}

// last names the end of a half-open span: the last day that it holds, or the
// hour at which it ends.
func last(end time.Time) string {
	if midnight(end) {
		return day(end.AddDate(0, 0, -1))
	}
	return clock(end) + " on " + day(end)
}

// clock is a time of day, with seconds unless it is on the minute.
func clock(t time.Time) string {
	if t.Second() != 0 {
		return t.Format("15:04:05 MST")
	}
	return t.Format("15:04 MST")
}

func midnight(t time.Time) bool {
	return t.Hour() == 0 && t.Minute() == 0 && t.Second() == 0 && t.Nanosecond() == 0
}

// span is "28 days to 3 March 2026", "6 hours to 14:00 CET on 3 March 2026".
func span(e *life.Evidence, zone *time.Location) string {
	from, to := e.From.In(zone), e.To.In(zone)
	if e.Shortened > 0 { // by a reset or a change
		return "time from " + moment(from) + " to " + last(to)
	}
	if ofTrials(e) {
		return "last " + exposure(e) + " to " + clock(to) + " on " + day(to)
	}
	if e.Wait != nil {
		return toEvent(e, to)
	}
	n, unit, ok := windowUnit(e.Window)
	if !ok {
		return "time from " + moment(from) + " to " + last(to)
	}
	long := fmt.Sprintf("%d %ss", n, unit)
	if n == 1 {
		long = unit
	}
	if unit == "minute" || unit == "hour" {
		return long + " to " + clock(to) + " on " + day(to)
	}
	if n == 1 && unit == "day" {
		return "day of " + last(to)
	}
	return long + " to " + last(to)
}

// ofTrials reports a window of the last so many trials.
func ofTrials(e *life.Evidence) bool {
	_, ok := config.ParseTrials(e.Window)
	return ok
}

// exposed is what stands in brackets behind a span: the exposure, or of the last
// trials, which name it already, since when they were made.
func exposed(e *life.Evidence, zone *time.Location) string {
	if ofTrials(e) {
		return "since " + moment(e.From.In(zone))
	}
	return exposure(e)
}

// length is the length of a window in words: "1 year", "28 days".
func length(window string) string {
	n, unit, ok := windowUnit(window)
	if !ok {
		return clean(window)
	}
	return Amount(int64(n), unit+"s")
}

// windowUnit reads a window as configured: 28d is 28 days.
func windowUnit(window string) (int, string, bool) {
	digits := strings.TrimRight(window, "abcdefghijklmnopqrstuvwxyz")
	n, err := strconv.Atoi(digits)
	if err != nil || n < 1 {
		return 0, "", false
	}
	switch window[len(digits):] {
	case "m":
		return n, "minute", true
	case "h":
		return n, "hour", true
	case "d":
		return n, "day", true
	case "w":
		return n, "week", true
	case "mo":
		return n, "month", true
	case "y":
		return n, "year", true
	}
	return 0, "", false
}
