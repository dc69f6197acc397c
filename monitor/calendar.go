package monitor

import (
	"time"

	"tailbell/config"
)

// Calendar numbers the slots of an indicator. Slots tile all of time without
// gap or overlap.
//
// Slots shorter than a day are uniform in elapsed time; their boundaries are
// aligned to the zone's offset at the beginning of 2000, modulo the slot. Days,
// weeks (from Monday), months, quarters and years follow the civil calendar
// of the zone. A day lasts 23 or 25 hours when clocks change, and has no
// length at all where a zone skipped a date.
//
// A Calendar remembers the slot it found last: it serves one goroutine.
type Calendar struct {
	every  config.Every
	zone   *time.Location
	length int64 // microseconds, for slots shorter than a day; else 0
	even   int64 // the same, for all slots that are alike
	shift  int64
	// The slot last found, for the many observations of one day.
	last               int64
	lastStart, lastEnd Instant
}

const (
	minute = int64(time.Minute / time.Microsecond)
	hour   = 60 * minute
	day    = 24 * hour
)

// NewCalendar returns the calendar for slots of the given length in a zone.
func NewCalendar(every config.Every, zone *time.Location) *Calendar {
	c := &Calendar{every: every, zone: zone}
	switch every.Unit {
	case config.Minute:
		c.length = int64(every.N) * minute
	case config.Hour:
		c.length = int64(every.N) * hour
	case config.Day, config.Week:
		if zone == time.UTC { // whose days are all alike
			c.even = day
			if every.Unit == config.Week {
				c.even, c.shift = 7*day, -4*day // from Monday 1970-01-05
			}
		}
		return c
	case config.Month, config.Year:
		return c
	}
	_, offset := time.Date(2000, 1, 1, 0, 0, 0, 0, time.UTC).In(zone).Zone()
	c.shift, c.even = floorMod(int64(offset)*1e6, c.length), c.length
	return c
}

// Start returns when the slot begins; it ends when the next one begins.
func (c *Calendar) Start(slot int64) Instant {
	if c.even > 0 {
		return Instant(slot*c.even - c.shift)
	}
	if c.lastStart < c.lastEnd {
		switch slot {
		case c.last:
			return c.lastStart
		case c.last + 1:
			return c.lastEnd
		}
	}
	switch c.every.Unit {
	case config.Day:
		return c.dayStart(time.Date(1970, 1, 1+int(slot), 0, 0, 0, 0, time.UTC))
	case config.Week:
		return c.dayStart(time.Date(1970, 1, 5+7*int(slot), 0, 0, 0, 0, time.UTC))
	case config.Month:
		return c.dayStart(time.Date(0, time.Month(1+int(slot)*c.every.N), 1, 0, 0, 0, 0, time.UTC))
	case config.Year:
		return c.dayStart(time.Date(int(slot), 1, 1, 0, 0, 0, 0, time.UTC))
	case config.Minute, config.Hour:
	}
	panic("monitor: calendar without a unit")
}

// Slot returns the slot that holds the moment.
func (c *Calendar) Slot(at Instant) int64 {
	if c.even > 0 {
		return floorDiv(int64(at)+c.shift, c.even)
	}
	if at < c.lastStart || at >= c.lastEnd {
		slot := c.search(at)
		c.lastStart, c.lastEnd, c.last = c.Start(slot), c.Start(slot+1), slot
	}
	return c.last
}

func (c *Calendar) search(at Instant) int64 {
	y, m, d := at.Time().In(c.zone).Date()
	days := time.Date(y, m, d, 0, 0, 0, 0, time.UTC).Unix() / 86400 // exact: midnights
	var slot int64
	switch c.every.Unit {
	case config.Day:
		slot = days
	case config.Week:
		slot = floorDiv(days-4, 7)
	case config.Month:
		slot = floorDiv(int64(y)*12+int64(m)-1, int64(c.every.N))
	case config.Year:
		slot = int64(y)
	case config.Minute, config.Hour:
	}
	for c.Start(slot) > at {
		slot--
	}
	for c.Start(slot+1) <= at {
		slot++
	}
	return slot
}

// phase is the slot from which steps of several slots are counted: the first
// Monday of 1970 for days, else slot 0.
func (c *Calendar) phase() int64 {
	if c.every.Unit == config.Day {
		return 4
	}
	return 0
}

// dayStart returns the first moment of a civil date, given as its midnight in
// UTC, in the calendar's zone. A date that the zone skipped begins (and ends)
// at the moment of the skip.
func (c *Calendar) dayStart(midnight time.Time) Instant {
	first := Never
	for _, around := range [...]time.Duration{-26 * time.Hour, 0, 26 * time.Hour} {
		_, offset := midnight.Add(around).In(c.zone).Zone()
		t := midnight.Add(-time.Duration(offset) * time.Second)
		if _, have := t.In(c.zone).Zone(); have == offset {
			first = min(first, InstantOf(t))
		}
	}
	if first != Never {
		return first
	}
	_, offset := midnight.Add(-26 * time.Hour).In(c.zone).Zone()
	skip, _ := midnight.Add(-time.Duration(offset) * time.Second).In(c.zone).ZoneBounds()
	return InstantOf(skip)
}

func floorDiv(a, b int64) int64 {
	q := a / b
	if a%b != 0 && (a < 0) != (b < 0) {
		q--
	}
	return q
}

func floorMod(a, b int64) int64 { return a - floorDiv(a, b)*b }
