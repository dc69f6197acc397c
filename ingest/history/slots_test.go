package history

import (
	"fmt"
	"strings"
	"testing"

	"tailbell/config"
	"tailbell/ingest/wire"
	"tailbell/monitor"
)

const slotsSetup = `name = "calendar"
[time]
mode = "history"
[limits]
max_series = 10
max_ids = 1000
[[indicator]]
name = "fall"
series = ["w/*"]
unit = "bed-days"
every = %q
zone = %q
events = "counted"
settle = "0s"
horizon = %q
ahead = %q
windows = [%q]
p_limit = 0.001
quiet = 2
[indicator.baseline]
kind = "known"
rate = 1
`

// slotsOf reads rows of the columns at, date, start, end and events, and counts
// them in an engine. It returns the slots, and why rows were refused.
func slotsOf(t *testing.T, every, zone string, rows ...string) (slots, refused []string) {
	t.Helper()
	back := "36600d"
	if every == "1h" {
		back = "1000d"
	}
	setup, err := config.Parse(fmt.Appendf(nil, slotsSetup, every, zone, back, back, every), "test")
	if err != nil {
		t.Fatal(err)
	}
	z := setup.Indicators[0].Zone
	text := "series,at,date,start,end,events,exposure\n"
	for _, row := range rows {
		text += "w/1," + row + "\n"
	}
	h := read(t, Options{Zone: z}, write(t, "x.csv", text))
	for _, f := range h.Faults {
		refused = append(refused, string(f.Reason))
	}
	e := monitor.New(monitor.Partition{Of: 1, KeyParts: 1})
	e.Apply(&monitor.Message{Position: 1, Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
	d := wire.NewDecoder(wire.Limits{})
	for i := range h.Entries {
		m := d.Decode(wire.Raw{
			Position: uint64(i + 2), Subject: "calendar.in.0.obs", Data: h.Entries[i].JSON,
			Header: map[string][]string{wire.TimeHeader: {wire.FormatTime(h.Entries[i].Time)}},
		})
		e.Apply(&m)
	}
	for _, r := range e.Drain().Refused {
		refused = append(refused, string(r.Reason)+" "+r.Detail)
	}
	for _, s := range e.Slots() {
		slots = append(slots, fmt.Sprintf("%s %d %s", s.Start.Time().In(z).Format("2006-01-02T15:04:05-07:00"), s.Events, s.Exposure))
	}
	return slots, refused
}

// TestRowsToSlots follows rows of a file into the engine's slots, where calendars
// are hard. A day's exposure of 24 spread over hours shows how long it lasts.
func TestRowsToSlots(t *testing.T) {
	for _, c := range []struct {
		name, every, zone string
		rows              []string
		want              []string
		refused           []string
	}{
		{"the north's spring: 2:00 to 3:00 is no time", "1d", "Europe/Berlin", []string{
			"2026-03-29T01:59,,,,1,", "2026-03-29T02:30,,,,1,", "2026-03-29T03:00,,,,1,", ",2026-03-29,,,1,23", ",2026-03-30,,,1,24",
		}, []string{"2026-03-29T00:00:00+01:00 3 23", "2026-03-30T00:00:00+02:00 1 24"}, []string{"bad_time"}},
		{"the north's autumn: 2:30 comes twice, unless the offset is given", "1d", "Europe/Berlin", []string{
			"2026-10-25T02:30,,,,1,", "2026-10-25T02:30:00+02:00,,,,1,", "2026-10-25T02:30:00+01:00,,,,1,", ",2026-10-25,,,0,25",
		}, []string{"2026-10-25T00:00:00+02:00 2 25"}, []string{"bad_time"}},
		{"the south's autumn", "1d", "Australia/Sydney", []string{
			"2026-04-05T02:30,,,,1,", "2026-04-05T03:00,,,,1,", ",2026-04-05,,,0,25",
		}, []string{"2026-04-05T00:00:00+11:00 1 25"}, []string{"bad_time"}},
		{"the south's spring", "1d", "Pacific/Auckland", []string{
			"2026-09-27T02:30,,,,1,", "2026-09-27T01:59,,,,1,", "2026-09-27T03:01,,,,1,", ",2026-09-27,,,0,23",
		}, []string{"2026-09-27T00:00:00+12:00 2 23"}, []string{"bad_time"}},
		{"half an hour", "1d", "Australia/Lord_Howe", []string{
			"2026-10-04T02:15,,,,1,", ",2026-10-04,,,1,23.5",
		}, []string{"2026-10-04T00:00:00+10:30 1 23.5"}, []string{"bad_time"}},
		{"no change at all", "1d", "Asia/Kolkata", []string{
			"2026-03-29T02:30,,,,1,", ",2026-03-29,,,1,24", ",2026-10-25,,,1,24",
		}, []string{"2026-03-29T00:00:00+05:30 2 24", "2026-10-25T00:00:00+05:30 1 24"}, nil},
		{"a day without midnight", "1d", "America/Sao_Paulo", []string{
			"2018-11-04T00:30,,,,1,", ",2018-11-04,,,1,23", "2018-11-03T23:59,,,,1,",
		}, []string{"2018-11-03T00:00:00-03:00 1 0", "2018-11-04T01:00:00-02:00 1 23"}, []string{"bad_time"}},
		{"rules that changed: no clock change after 2019", "1d", "America/Sao_Paulo", []string{
			"2019-11-03T00:30,,,,1,", ",2019-11-03,,,1,24",
		}, []string{"2019-11-03T00:00:00-03:00 2 24"}, nil},
		{"rules that changed: summer time for good", "1d", "Europe/Istanbul", []string{
			",2015-11-08,,,1,25", ",2016-10-30,,,1,24", "2016-10-30T03:30,,,,1,",
		}, []string{"2015-11-08T00:00:00+03:00 1 25", "2016-10-30T00:00:00+03:00 2 24"}, nil},
		{"a date that was skipped", "1d", "Pacific/Apia", []string{
			",2011-12-29,,,1,24", "2011-12-30T12:00,,,,1,", ",2011-12-31,,,1,24",
		}, []string{"2011-12-29T00:00:00-10:00 1 24", "2011-12-31T00:00:00+14:00 1 24"}, []string{"bad_time"}},
		{"local mean time", "1y", "Europe/Berlin", []string{
			",1851,,,3,", ",1851-06-01,,,1,", "1851-12-31T23:59:59,,,,1,", "1852-01-01T00:00:00,,,,1,",
		}, []string{"1851-01-01T00:00:00+00:53 5 0", "1852-01-01T00:00:00+00:53 1 0"}, nil},
		{"the end of local mean time", "1d", "Europe/Berlin", []string{
			",1893-03-31,,,1,24", ",1893-04-01,,,1,24",
		}, nil, nil},
		{"leap seconds", "1d", "UTC", []string{
			"2016-12-31T23:59:60Z,,,,1,", "2015-06-30T23:59:60Z,,,,1,", "2017-01-01T00:59:60+01:00,,,,1,", "2016-12-31T22:59:60Z,,,,1,", "2016-11-30T23:59:60Z,,,,1,",
		}, []string{"2015-07-01T00:00:00+00:00 1 0", "2017-01-01T00:00:00+00:00 2 0"}, []string{"bad_time", "bad_time"}},
		{"the first year", "1y", "UTC", []string{
			",0001,,,1,", "0001-01-01T00:00:00Z,,,,1,", "0000-12-31T23:59:59Z,,,,1,", ",0000,,,1,",
		}, []string{"0001-01-01T00:00:00+00:00 2 0"}, []string{"bad_time", "bad_time"}},
		{"the last year", "1y", "UTC", []string{
			"9997-06-01T00:00:00Z,,,,1,", "9998-12-31T23:59:59Z,,,,1,", "9999-01-01T00:00:00Z,,,,1,", ",9999,,,1,",
		}, []string{"9997-01-01T00:00:00+00:00 1 0", "9998-01-01T00:00:00+00:00 1 0"}, []string{"bad_time", "bad_time"}},
		{"the last year that a row can hold as a whole", "1y", "UTC", []string{",9997,,,1,", ",9998,,,1,"}, []string{"9997-01-01T00:00:00+00:00 1 0"}, []string{"bad_time"}},
		{
			"the first day far in the west", "1d", "Pacific/Pago_Pago",
			[]string{"0001-01-01T00:00:00-11:00,,,,1,", "0001-01-01T00:00:00+14:00,,,,1,"},
			[]string{"0001-01-01T00:00:00+12:37 1 0"},
			[]string{"bad_time"},
		}, // the latter lies in the year 0 of UTC, in which it would be published
		{"the last day far in the east", "1d", "Pacific/Kiritimati", []string{"9998-12-30T23:59:59+14:00,,,,1,", "9998-12-31T23:59:59+14:00,,,,1,"}, nil, nil},
	} {
		t.Run(c.name, func(t *testing.T) {
			slots, refused := slotsOf(t, c.every, c.zone, c.rows...)
			if c.want == nil { // what matters is that nothing is lost
				if len(slots) != 2 || len(refused) > 0 {
					t.Errorf("slots %q, refused %q", slots, refused)
				}
				t.Logf("%q", slots)
				return
			}
			if got, want := strings.Join(slots, "\n"), strings.Join(c.want, "\n"); got != want {
				t.Errorf("slots\n%s\nwant\n%s", got, want)
			}
			if got, want := strings.Join(refused, "\n"), strings.Join(c.refused, "\n"); got != want {
				t.Errorf("refused\n%s\nwant\n%s", got, want)
			}
		})
	}
}

// TestExposureSpreadsOverTheHoursThereAre spreads a whole day's exposure over its
// hours: 23, 24 or 25 of them, each with the same.
func TestExposureSpreadsOverTheHoursThereAre(t *testing.T) {
	for _, c := range []struct {
		zone, day string
		hours     int
	}{
		{"Europe/Berlin", "2026-03-29", 23},
		{"Europe/Berlin", "2026-10-25", 25},
		{"Australia/Sydney", "2026-04-05", 25},
		{"America/Santiago", "2026-09-06", 23},
		{"Asia/Tokyo", "2026-03-29", 24},
		{"America/Havana", "2026-11-01", 25},
	} {
		slots, refused := slotsOf(t, "1h", c.zone, fmt.Sprintf(",%s,,,,%d", c.day, c.hours))
		if len(slots) != c.hours || len(refused) > 0 {
			t.Errorf("%s in %s: %d slots, refused %v", c.day, c.zone, len(slots), refused)
		}
		for _, s := range slots {
			if !strings.HasSuffix(s, " 0 1") {
				t.Errorf("%s in %s: %s", c.day, c.zone, s)
			}
		}
	}
}
