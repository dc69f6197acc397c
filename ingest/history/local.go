package history

import (
	"fmt"
	"strings"
	"time"

	"tailbell/ingest/wire"
	"tailbell/monitor"
)

// ParseTime reads a time as the columns start, end, at and reported have it:
// RFC 3339 with an offset; or, if zone is not nil, a local date-time or date,
// which is its first moment.
func ParseTime(text string, zone *time.Location) (monitor.Instant, error) { return moment(text, zone) }

// moment reads a time: RFC 3339 with an offset; or, with a zone, a local
// date-time (2026-03-02T14:30, 2026-03-02 14:30:00) or a local date, which is
// its first moment.
func moment(text string, zone *time.Location) (monitor.Instant, error) {
	at, err := wire.ParseTime(text)
	if err == nil {
		return at, nil
	}
	wall, isDate, ok := wallTime(text)
	if !ok {
		return 0, err
	}
	if zone == nil {
		return 0, fmt.Errorf("%q has no offset; add it (2026-03-02T14:30:00+01:00), or name the zone in which times are local with --zone", text)
	}
	if isDate {
		return firstMoment(wall, zone), nil
	}
	switch found := moments(wall, zone); len(found) {
	case 0:
		return 0, fmt.Errorf("%q is no time in %s: the clock was put forward over it", text, zone)
	case 1:
		return found[0], nil
	}
	return 0, fmt.Errorf("%q comes twice in %s, as the clock was put back; add the offset", text, zone)
}

// wallTime reads what a clock and calendar show, as if they showed UTC.
func wallTime(text string) (wall time.Time, isDate, ok bool) {
	if wall, err := time.Parse(time.DateOnly, text); err == nil && inRange(wall.Year()) {
		return wall, true, true
	}
	if len(text) < 16 || (text[10] != 'T' && text[10] != ' ') || strings.Contains(text, ",") {
		return wall, false, false
	}
	dashed := text[:10] + "T" + text[11:]
	for _, layout := range []string{"2006-01-02T15:04", "2006-01-02T15:04:05"} {
		if wall, err := time.Parse(layout, dashed); err == nil && inRange(wall.Year()) {
			return wall, false, true
		}
	}
	return wall, false, false
}

func inRange(year int) bool { return year >= 1 && year <= 9998 }

// offsets returns the zone's offsets a day before and a day after the wall
// time, between which it changes at most once.
func offsets(wall time.Time, zone *time.Location) (before, after time.Duration) {
	_, b := wall.Add(-24 * time.Hour).In(zone).Zone()
	_, a := wall.Add(24 * time.Hour).In(zone).Zone()
	return time.Duration(b) * time.Second, time.Duration(a) * time.Second
}

// moments returns when the clocks of the zone show the wall time: once; not at
// all, if they are put forward over it; or twice, if they are put back.
func moments(wall time.Time, zone *time.Location) []monitor.Instant {
	before, after := offsets(wall, zone)
	var found []monitor.Instant
	for _, offset := range []time.Duration{before, after} {
		at := wall.Add(-offset)
		if _, shown := at.In(zone).Zone(); time.Duration(shown)*time.Second != offset {
			continue
		}
		if i := monitor.InstantOf(at); len(found) == 0 || found[0] != i {
			found = append(found, i)
		}
	}
	return found
}

// firstMoment returns the first moment of a day, which a zone may begin at
// another time than midnight.
func firstMoment(day time.Time, zone *time.Location) monitor.Instant {
	if found := moments(day, zone); len(found) > 0 {
		return found[0]
	}
	before, _ := offsets(day, zone)
	return monitor.InstantOf(day.Add(-before))
}

// span reads a civil day (2026-03-02), month (2026-03) or year (1851) as the
// interval that it covers in the zone.
func span(text string, zone *time.Location) (start, end monitor.Instant, err error) {
	forms := []struct {
		layout              string
		years, months, days int
	}{{time.DateOnly, 0, 0, 1}, {"2006-01", 0, 1, 0}, {"2006", 1, 0, 0}}
	for _, form := range forms {
		first, err := time.Parse(form.layout, text)
		if err != nil || !inRange(first.Year()) {
			continue
		}
		return firstMoment(first, zone), firstMoment(first.AddDate(form.years, form.months, form.days), zone), nil
	}
	return 0, 0, fmt.Errorf("%q is no day, month or year; write it like 2026-03-02, 2026-03 or 1851", text)
}
