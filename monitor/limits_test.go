package monitor

import (
	"bytes"
	"encoding/binary"
	"strings"
	"testing"
	"time"

	"tailbell/config"
)

// TestWithoutLimits reads a state that was written before there were
// allowances.
func TestWithoutLimits(t *testing.T) {
	zone, err := time.LoadLocation("Europe/Berlin")
	if err != nil {
		t.Fatal(err)
	}
	e := New(Partition{Of: 1, KeyParts: 1})
	viewDays(t, e, zone)
	s := e.byName["a/fall"]
	now := s.encode(nil, true)
	tail := binary.AppendUvarint(nil, uint64(len(s.cells)))
	before := bytes.Clone(tail)
	for i := range s.cells {
		tail = s.encodeCell(tail, &s.cells[i])
		c := s.encodeCell(nil, &s.cells[i])
		n := len(c) // no ids: the last but one says whether it was revised
		before = append(append(before, c[:n-2]...), c[n-1])
	}
	old := bytes.Clone(now[:len(now)-len(tail)-1]) // less the number of limits
	old[0] = withoutLimits
	old = append(old, before...)
	read := &series{}
	if err := e.overlay(read, old); err != nil {
		t.Fatal(err)
	}
	if !bytes.Equal(read.encode(nil, true), now) {
		t.Error("the old state is read as another one")
	}
	old[0] = withCounts + 1
	if err := e.overlay(&series{}, old); err == nil || !strings.Contains(err.Error(), "not known to this program") {
		t.Errorf("a newer state: %v", err)
	}
}

// TestLimitsAreShared checks that series that are alike share their limits, that
// a day without news adds none, and that a usual look under an allowance
// allocates nothing.
func TestLimitsAreShared(t *testing.T) {
	text := strings.Replace(viewSetup, "p_limit = 0.02", `allowance = "1 in 1y"`, 1)
	text = strings.Replace(text, `events = "each"`, "events = \"each\"\nexposure = \"clock\"\nclock = { size = 40, per = \"1d\" }\nsince = \"2026-01-01\"", 1)
	text = strings.Replace(text, `zone = "Europe/Berlin"`, `zone = "UTC"`, 1)
	setup, err := config.Parse([]byte(text), "set-up")
	if err != nil {
		t.Fatal(err)
	}
	e := New(Partition{Of: 1, KeyParts: 1})
	e.Apply(&Message{Kind: SettingMessage, Position: 1, Setting: Setting{Setup: setup}})
	at := InstantOf(time.Date(2026, 3, 1, 12, 0, 0, 0, time.UTC))
	for i, name := range []string{"a/fall", "b/fall"} {
		o := Observation{Series: name, Start: at, End: at, Instant: true, Events: 1, HasEvents: true}
		e.Apply(&Message{Kind: Observations, Position: uint64(i + 2), HasTime: true, Time: at, Items: []Item{{Observation: o}}})
	}
	for d := range 30 {
		e.Apply(&Message{Kind: Tick, Position: uint64(d + 4), HasTime: true, Time: at.Add(time.Duration(d) * 24 * time.Hour)})
	}
	a, b := e.byName["a/fall"], e.byName["b/fall"]
	if len(a.limits) != 1 || len(b.limits) != 1 || a.limits[0].solution != b.limits[0].solution || e.allowances.Solved != 1 {
		t.Errorf("a has %d limits, b %d, %d plans were solved", len(a.limits), len(b.limits), e.allowances.Solved)
	}
	ix := a.indicator
	ep := ix.epochAt(ix.looked)
	if n := testing.AllocsPerRun(100, func() { ix.look(a, ep, 0, ix.looked, e.clock) }); n != 0 {
		t.Errorf("a usual look allocates %v times", n)
	}
	busy := InstantOf(time.Date(2026, 3, 28, 12, 0, 0, 0, time.UTC))
	o := Observation{Series: "a/fall", Start: busy, End: busy, Instant: true, Events: 5, HasEvents: true}
	e.Apply(&Message{Kind: Observations, Position: 40, Items: []Item{{Observation: o}}})
	if n := testing.AllocsPerRun(100, func() { ix.look(a, ep, 1, ix.looked, e.clock) }); n != 0 {
		t.Errorf("a look at 5 events that do not signal allocates %v times", n)
	}
}

func TestRoundUp(t *testing.T) {
	for n, want := range map[int]int{0: 0, 1: 1, 31: 31, 32: 32, 33: 34, 63: 64, 64: 64, 65: 68, 100_000: 102_400} {
		if got := roundUp(n); got != want || n > 0 && float64(got) > 1.0625*float64(n) {
			t.Errorf("%d series count as %d, want %d", n, got, want)
		}
	}
}
