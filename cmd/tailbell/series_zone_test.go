package main

import (
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"tailbell/config"
)

const twoZones = seriesSetup + `
[[indicator]]
name = "alarm"
noun = "alarms"
series = ["quillmere-*/*/alarm"]
unit = "hours"
every = "1h"
settle = "5m"
horizon = "2d"
windows = ["24h"]
p_limit = 0.001
[indicator.baseline]
kind = "known"
rate = 0.005
`

// Dates are read in the zone of the series that match, where indicators of several
// zones may have some.
func TestDatesOfSeriesOfOneZone(t *testing.T) {
	path := filepath.Join(t.TempDir(), "tailbell.toml")
	if err := os.WriteFile(path, []byte(twoZones), 0o600); err != nil {
		t.Fatal(err)
	}
	s := newService(t, path)
	s.start()
	var lines []string
	for day := 1; day <= 31; day++ {
		lines = append(lines, bedDays("quillmere-east/ward-3", day, 0), bedDays("quillmere-east/ward-4", day, 0))
	}
	s.feeds(lines)
	by := func(args ...string) []string { return append(append([]string{"series"}, args...), "--by", "A. Nurse") }
	drill := by("out-of-service", "quillmere-east/ward-*/*", "--from", "2026-04-10", "--until", "2026-04-20", "--why", "drill")
	s.says(0, []string{"quillmere-east/ward-*/* (2 series) out of service from 2026-04-10 to 2026-04-20 (Europe/Berlin)."}, drill...)
	list := s.says(0, nil, "series", "list", "quillmere-east/ward-3/*", "--json")
	if begin := "2026-04-10T00:00:00+02:00"; !strings.Contains(list, begin) {
		t.Errorf("it does not begin %s:\n%s", begin, list)
	}
	s.says(0, []string{"of 2026-03 (Europe/Berlin) signed off"}, by("sign-off", "quillmere-east/ward-*/*", "--month", "2026-03")...)
	s.feeds([]string{`{"series":"quillmere-east/ward-3/alarm","start":"2026-04-01T02:00:00Z","end":"2026-04-01T03:00:00Z","events":0,"exposure":1}`})
	s.says(2, []string{"the series are in several zones"}, drill...)
	s.says(2, []string{"the series are in several zones, so say --from and --until"}, by("sign-off", "quillmere-east/ward-*/*", "--month", "2026-03")...)
	// What belongs to an indicator is told in its zone, the rest in UTC.
	s.says(0, []string{"clock 2026-04-01 03:00:00 UTC"}, "status")
}

func TestZones(t *testing.T) {
	at := time.Date(2026, 7, 1, 22, 30, 0, 0, time.UTC)
	one, err := config.Parse([]byte(seriesSetup), "one")
	if err != nil {
		t.Fatal(err)
	}
	two, err := config.Parse([]byte(twoZones), "two")
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		z                zones
		rest, fall, none string
	}{
		{zonesOf(one), "2026-07-02 00:30:00 CEST", "2026-07-02 00:30 CEST", "2026-07-02 00:30 CEST"},
		{zonesOf(two), "2026-07-01 22:30:00 UTC", "2026-07-02 00:30 CEST", "2026-07-01 22:30 UTC"},
		{zones{}, "2026-07-01 22:30:00 UTC", "2026-07-01 22:30 UTC", "2026-07-01 22:30 UTC"},
	} {
		if a, b, d := c.z.stamp(at), c.z.stampOf("fall", at), c.z.stampOf("gone", at); a != c.rest || b != c.fall || d != c.none {
			t.Errorf("%s, %s, %s", a, b, d)
		}
	}
}
