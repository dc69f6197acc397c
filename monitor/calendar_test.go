package monitor

import (
	"fmt"
	"math/rand/v2"
	"testing"
	"time"

	"tailbell/config"
)

// calendarZones have rules of every sort: both hemispheres, half hours,
// changes at midnight, a skipped date, local mean time until late.
var calendarZones = []string{
	"UTC", "Europe/Berlin", "Europe/London", "Europe/Dublin", "America/New_York", "America/St_Johns", "America/Sao_Paulo",
	"America/Asuncion", "America/Santiago", "America/Havana", "America/Godthab", "America/Anchorage", "America/Caracas",
	"Australia/Lord_Howe", "Australia/Sydney", "Pacific/Apia", "Pacific/Kwajalein", "Pacific/Kiritimati", "Pacific/Chatham",
	"Pacific/Fakaofo", "Asia/Kathmandu", "Asia/Kolkata", "Asia/Tehran", "Asia/Beirut", "Asia/Amman", "Asia/Gaza", "Asia/Manila",
	"Asia/Pyongyang", "Africa/Cairo", "Africa/Casablanca", "Africa/Monrovia", "Antarctica/Troll", "Atlantic/Azores",
}

var calendarSlots = []config.Every{
	{N: 1, Unit: config.Minute},
	{N: 15, Unit: config.Minute},
	{N: 20, Unit: config.Minute},
	{N: 1, Unit: config.Hour},
	{N: 1, Unit: config.Day},
	{N: 1, Unit: config.Week},
	{N: 1, Unit: config.Month},
	{N: 3, Unit: config.Month},
	{N: 1, Unit: config.Year},
}

func zoneOf(t *testing.T, name string) *time.Location {
	t.Helper()
	zone, err := config.LoadZone(name)
	if err != nil {
		t.Fatalf("zone %s: %v", name, err)
	}
	return zone
}

func civil(t *testing.T, zone *time.Location, text string) Instant {
	t.Helper()
	at, err := time.ParseInLocation("2006-01-02 15:04", text, zone)
	if err != nil {
		t.Fatal(err)
	}
	return InstantOf(at)
}

// checkTiling checks that slots tile time around a moment.
func checkTiling(c *Calendar, at Instant) error {
	s := c.Slot(at)
	if start, end := c.Start(s), c.Start(s+1); at < start || at >= end {
		return fmt.Errorf("%s lies in slot %d, which lasts from %s to %s", at.Time(), s, start.Time(), end.Time())
	}
	for n := s - 2; n <= s+2; n++ {
		start, end := c.Start(n), c.Start(n+1)
		switch {
		case end < start:
			return fmt.Errorf("slot %d begins %s, the next one %s", n, start.Time(), end.Time())
		case end == start:
			if got := c.Slot(start); got <= n {
				return fmt.Errorf("slot %d has no length, but holds %s (slot %d)", n, start.Time(), got)
			}
			continue
		}
		for _, t := range []Instant{start, start + (end-start)/2, end - 1} {
			if got := c.Slot(t); got != n {
				return fmt.Errorf("%s lies in slot %d, which lasts from %s to %s, but got %d", t.Time(), n, start.Time(), end.Time(), got)
			}
		}
	}
	return nil
}

func TestSlotsTileTime(t *testing.T) {
	const seed = 20261201
	rng := rand.New(rand.NewPCG(seed, 1))
	first, last := InstantOf(time.Date(0, 1, 1, 0, 0, 0, 0, time.UTC)), InstantOf(time.Date(9999, 12, 31, 23, 59, 59, 0, time.UTC))
	recent := InstantOf(time.Date(1880, 1, 1, 0, 0, 0, 0, time.UTC))
	modern := InstantOf(time.Date(2040, 1, 1, 0, 0, 0, 0, time.UTC))
	for _, name := range calendarZones {
		zone := zoneOf(t, name)
		for _, every := range calendarSlots {
			c := NewCalendar(every, zone)
			moments := []Instant{first, last, 0, -1, InstantOf(time.Date(1851, 6, 1, 12, 0, 0, 0, time.UTC))}
			for range 15 {
				moments = append(moments, first+Instant(rng.Int64N(int64(last-first))))
			}
			for range 40 {
				moments = append(moments, recent+Instant(rng.Int64N(int64(modern-recent))))
			}
			for _, at := range moments {
				if err := checkTiling(c, at); err != nil {
					t.Fatalf("seed %d, %s slots in %s: %v", seed, every, name, err)
				}
			}
		}
	}
}

// TestSlotsAtTransitions tries the hours around every change of every zone's
// clocks since 1840.
func TestSlotsAtTransitions(t *testing.T) {
	from, to := time.Date(1840, 1, 1, 0, 0, 0, 0, time.UTC), time.Date(2038, 1, 1, 0, 0, 0, 0, time.UTC)
	seen := 0
	for _, name := range calendarZones {
		zone := zoneOf(t, name)
		for change := from; change.Before(to); {
			_, end := change.In(zone).ZoneBounds()
			if end.IsZero() {
				break
			}
			if !end.After(change) { // at the end of a year without a change the library stays where it is
				change = change.Add(24 * time.Hour)
				continue
			}
			change = end
			seen++
			for _, every := range calendarSlots {
				c := NewCalendar(every, zone)
				for _, d := range []time.Duration{-25 * time.Hour, -time.Hour, -time.Microsecond, 0, time.Hour, 25 * time.Hour} {
					if err := checkTiling(c, InstantOf(change.Add(d))); err != nil {
						t.Fatalf("%s slots in %s around %s: %v", every, name, change, err)
					}
				}
			}
		}
	}
	if seen < 2000 {
		t.Errorf("only %d changes tried", seen)
	}
}

// TestCivilDays checks that a day begins with the first moment of its date.
func TestCivilDays(t *testing.T) {
	const seed = 7
	rng := rand.New(rand.NewPCG(seed, 1))
	for _, name := range calendarZones {
		zone := zoneOf(t, name)
		c := NewCalendar(config.Every{N: 1, Unit: config.Day}, zone)
		for range 300 {
			day := int64(rng.IntN(70_000)) - 45_000 // 1846 to 2038
			date := func(i Instant) int64 {
				y, m, d := i.Time().In(zone).Date()
				return time.Date(y, m, d, 0, 0, 0, 0, time.UTC).Unix() / 86400
			}
			got := c.Start(day)
			if date(got) < day || date(got-1) >= day {
				t.Errorf("seed %d, %s: day %d can't begin %s", seed, name, day, got.Time().In(zone))
			}
		}
	}
}

func TestLengthOfDays(t *testing.T) {
	tests := []struct {
		zone, day string
		want      time.Duration
	}{
		{"Europe/Berlin", "2026-03-28 12:00", 24 * time.Hour},
		{"Europe/Berlin", "2026-03-29 12:00", 23 * time.Hour},
		{"Europe/Berlin", "2026-10-25 12:00", 25 * time.Hour},
		{"America/New_York", "2026-03-08 12:00", 23 * time.Hour},
		{"America/New_York", "2026-11-01 12:00", 25 * time.Hour},
		{"Australia/Lord_Howe", "2026-04-05 12:00", 24*time.Hour + 30*time.Minute},
		{"Australia/Lord_Howe", "2026-10-04 12:00", 23*time.Hour + 30*time.Minute},
		{"America/Sao_Paulo", "2018-11-04 12:00", 23 * time.Hour}, // no midnight
		{"America/Sao_Paulo", "2018-02-17 12:00", 25 * time.Hour}, // 23:00 twice
		{"Pacific/Apia", "2011-12-29 12:00", 24 * time.Hour},
		{"Pacific/Apia", "2011-12-31 12:00", 24 * time.Hour},
		{"Asia/Kathmandu", "1986-01-01 12:00", 24*time.Hour - 15*time.Minute}, // from 5:30 to 5:45
	}
	for _, tt := range tests {
		zone := zoneOf(t, tt.zone)
		c := NewCalendar(config.Every{N: 1, Unit: config.Day}, zone)
		slot := c.Slot(civil(t, zone, tt.day))
		if got := time.Duration(c.Start(slot+1)-c.Start(slot)) * time.Microsecond; got != tt.want {
			t.Errorf("%s: the day of %s lasts %s, want %s", tt.zone, tt.day, got, tt.want)
		}
	}
}

func TestSkippedDate(t *testing.T) {
	zone := zoneOf(t, "Pacific/Apia")
	c := NewCalendar(config.Every{N: 1, Unit: config.Day}, zone)
	skipped := c.Slot(civil(t, zone, "2011-12-29 12:00")) + 1
	if a, b := c.Start(skipped), c.Start(skipped+1); a != b || a != InstantOf(time.Date(2011, 12, 30, 10, 0, 0, 0, time.UTC)) {
		t.Errorf("the skipped day lasts from %s to %s", a.Time(), b.Time())
	}
	if got := c.Slot(c.Start(skipped)); got != skipped+1 {
		t.Errorf("the moment of the skip lies in slot %d, want %d", got, skipped+1)
	}
	weeks := NewCalendar(config.Every{N: 1, Unit: config.Week}, zone)
	week := weeks.Slot(civil(t, zone, "2011-12-29 12:00"))
	if got := weeks.Start(week+1) - weeks.Start(week); got != Instant(6*day) {
		t.Errorf("the week of the skip lasts %d hours, want six days", int64(got)/hour)
	}
}

func TestWhereSlotsBegin(t *testing.T) {
	tests := []struct {
		every      config.Every
		zone       string
		at, begins string
	}{
		{config.Every{N: 1, Unit: config.Week}, "Europe/Berlin", "2026-12-06 23:59", "2026-11-30 00:00"}, // Sunday to Monday
		{config.Every{N: 1, Unit: config.Week}, "Europe/Berlin", "2026-12-07 00:00", "2026-12-07 00:00"},
		{config.Every{N: 1, Unit: config.Month}, "America/New_York", "2026-02-28 23:59", "2026-02-01 00:00"},
		{config.Every{N: 3, Unit: config.Month}, "America/New_York", "2026-06-30 23:59", "2026-04-01 00:00"},
		{config.Every{N: 3, Unit: config.Month}, "America/New_York", "2026-07-01 00:00", "2026-07-01 00:00"},
		{config.Every{N: 1, Unit: config.Year}, "Asia/Kathmandu", "2026-07-01 00:00", "2026-01-01 00:00"},
		{config.Every{N: 1, Unit: config.Year}, "Asia/Kathmandu", "0001-07-01 00:00", "0001-01-01 00:00"},
		{config.Every{N: 1, Unit: config.Hour}, "Asia/Kathmandu", "2026-07-01 10:59", "2026-07-01 10:00"},
		{config.Every{N: 30, Unit: config.Minute}, "Asia/Kathmandu", "2026-07-01 10:31", "2026-07-01 10:30"},
		{config.Every{N: 20, Unit: config.Minute}, "Asia/Kathmandu", "2026-07-01 10:59", "2026-07-01 10:40"},
		{config.Every{N: 1, Unit: config.Hour}, "Australia/Lord_Howe", "2026-07-01 10:59", "2026-07-01 10:30"}, // summer time in 2000, half an hour
		{config.Every{N: 1, Unit: config.Hour}, "Australia/Lord_Howe", "2026-12-01 10:59", "2026-12-01 10:00"},
	}
	for _, tt := range tests {
		zone := zoneOf(t, tt.zone)
		c := NewCalendar(tt.every, zone)
		got := c.Start(c.Slot(civil(t, zone, tt.at)))
		if want := civil(t, zone, tt.begins); got != want {
			t.Errorf("%s in %s: the slot of %s begins %s, want %s", tt.every, tt.zone, tt.at, got.Time().In(zone), tt.begins)
		}
	}
}

// TestUniformSlots checks that slots shorter than a day keep their length
// through every change of the clocks.
func TestUniformSlots(t *testing.T) {
	for _, name := range calendarZones {
		c := NewCalendar(config.Every{N: 1, Unit: config.Hour}, zoneOf(t, name))
		for slot := int64(-1_200_000); slot < 600_000; slot += 7919 {
			if got := c.Start(slot+1) - c.Start(slot); got != Instant(hour) {
				t.Fatalf("%s: slot %d lasts %d µs", name, slot, got)
			}
		}
	}
}

// TestSlotMemory checks that what a calendar remembers changes nothing.
func TestSlotMemory(t *testing.T) {
	const seed = 3
	rng := rand.New(rand.NewPCG(seed, 1))
	zone := zoneOf(t, "America/Sao_Paulo")
	used := NewCalendar(config.Every{N: 1, Unit: config.Day}, zone)
	at := civil(t, zone, "2018-10-01 12:00")
	for range 20_000 {
		at += Instant(rng.Int64N(4*day) - 2*day + day/50)
		if got, want := used.Slot(at), NewCalendar(config.Every{N: 1, Unit: config.Day}, zone).Slot(at); got != want {
			t.Fatalf("seed %d: %s lies in slot %d, got %d", seed, at.Time(), want, got)
		}
	}
}

func TestStepsCountFromMonday(t *testing.T) {
	ix := newIndicator(0, &config.Indicator{Every: config.Every{N: 1, Unit: config.Day}, Zone: time.UTC})
	for d := range 28 {
		date := time.Date(1969, 12, 22+d, 0, 0, 0, 0, time.UTC) // a Monday
		boundary := ix.cal.Slot(InstantOf(date))
		if got, want := ix.looksAt(&config.Window{Slots: 28, Step: 7}, boundary), date.Weekday() == time.Monday; got != want {
			t.Errorf("%s: looks %v", date.Format("Mon 2006-01-02"), got)
		}
	}
}

// TestCalendarOfUTC holds the quick way over days and weeks of UTC against the
// civil one, which other zones take.
func TestCalendarOfUTC(t *testing.T) {
	likeUTC := time.FixedZone("like UTC", 0)
	for _, every := range []config.Every{{N: 1, Unit: config.Day}, {N: 1, Unit: config.Week}} {
		quick, civil := NewCalendar(every, time.UTC), NewCalendar(every, likeUTC)
		for _, year := range []int{1, 1599, 1899, 1969, 1970, 2000, 2026, 9998} {
			for n := range 40 {
				at := InstantOf(time.Date(year, 12, 20+n, 0, 0, 0, 0, time.UTC)) - Instant(n%3)
				slot := civil.Slot(at)
				if quick.Slot(at) != slot || quick.Start(slot) != civil.Start(slot) || quick.Start(slot+9) != civil.Start(slot+9) {
					t.Fatalf("%v at %v: slot %d from %d, want %d from %d", every, at.Time(), quick.Slot(at), quick.Start(slot), slot, civil.Start(slot))
				}
			}
		}
	}
}
