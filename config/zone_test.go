package config

import (
	"errors"
	"testing"
	"time"
)

func TestLoadZone(t *testing.T) {
	names := zoneNames()
	if len(names) < 500 {
		t.Fatalf("only %d zones", len(names))
	}
	for _, name := range names {
		zone, err := LoadZone(name)
		if err != nil || zone.String() != name {
			t.Errorf("%s: %v, %v", name, zone, err)
		}
	}
	for _, name := range []string{"", "Local", "Europe", "Europe/", "europe/berlin", "Europe/Berlin ", "../zoneinfo.zip", "CEST"} {
		if zone, err := LoadZone(name); !errors.Is(err, ErrZone) {
			t.Errorf("%q: %v, %v", name, zone, err)
		}
	}
}

// TestZoneRules checks offsets around a change to summer time: Berlin went to
// UTC+2 on 29 March 2026 at 01:00 UTC.
func TestZoneRules(t *testing.T) {
	berlin, err := LoadZone("Europe/Berlin")
	if err != nil {
		t.Fatal(err)
	}
	change := time.Date(2026, 3, 29, 1, 0, 0, 0, time.UTC)
	for _, test := range []struct {
		at   time.Time
		want int
	}{{change.Add(-time.Second), 3600}, {change, 7200}} {
		if _, offset := test.at.In(berlin).Zone(); offset != test.want {
			t.Errorf("%v: %d seconds", test.at, offset)
		}
	}
}

// TestZoneIgnoresMachine points the machine's zone data elsewhere: they must
// not be read.
func TestZoneIgnoresMachine(t *testing.T) {
	t.Setenv("ZONEINFO", t.TempDir())
	if _, err := LoadZone("Asia/Kathmandu"); err != nil {
		t.Error(err)
	}
}
