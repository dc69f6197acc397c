package history

import (
	"fmt"
	"math/rand/v2"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/replay"
)

// onTape returns the observations of a tape, in order, in the canonical form.
func onTape(tape *replay.Tape) []string {
	var list []string
	for m := range tape.Messages() {
		if m.Kind == monitor.ActMessage {
			list = append(list, string(wire.EncodeAct(nil, &m.Act)))
			continue
		}
		list = append(list, string(wire.EncodeObservation(nil, &m.Items[0].Observation)))
	}
	return list
}

// sameOnTape holds a reading onto a tape against one into entries.
func sameOnTape(t *testing.T, opts Options, paths ...string) *History {
	t.Helper()
	h := read(t, opts, paths...)
	tape := &replay.Tape{}
	opts.Tape = tape
	r := read(t, opts, paths...)
	if diff := cmp.Diff(entries(h), onTape(tape)); diff != "" {
		t.Fatalf("rows (-entries +tape):\n%s", diff)
	}
	if diff := cmp.Diff(h.Faults, r.Faults); diff != "" {
		t.Fatalf("faults (-entries +tape):\n%s", diff)
	}
	if diff := cmp.Diff(h.Counts, r.Counts); diff != "" {
		t.Fatalf("counts (-entries +tape):\n%s", diff)
	}
	i := 0
	for m := range tape.Messages() {
		e := &h.Entries[i]
		if place, ok := tape.Place(m.Position); !ok || place != (replay.Place{File: e.File, Line: e.Line}) || m.Time != e.Time {
			t.Fatalf("row %d stands at %v, %d; want %s:%d, %d", i, place, m.Time, e.File, e.Line, e.Time)
		}
		i++
	}
	return h
}

// TestTape reads random tables, plain rows among odd ones, both ways.
func TestTape(t *testing.T) {
	cells := map[string][]string{
		"series":   {"a/falls", "b/falls", "a/falls", "b/falls", "c/falls", "", "A b", `"a/falls"`, " b/falls "},
		"date":     {"2026-03-02", "2026-03-03", "2026-03-02", "2026-03", "1851", "2026-02-30", ""},
		"start":    {"2026-03-02", "2026-03-02T00:00:00+01:00", "2026-03-02T00:00:00Z", "2026-03-29T02:30", "2026-03-02 10:00"},
		"end":      {"2026-03-03", "2026-03-03T00:00:00+01:00", "2026-03-02T00:00:00Z", "2026-03-04", ""},
		"at":       {"2026-03-02T10:15:00Z", "", "2026-03-02 10:15"},
		"events":   {"0", "1", "12", "", "-1", "1.0", "01", "99999999999999999", "1e2", "x", " 3"},
		"exposure": {"22", "21.5", "0", "", "1e3", "0.500", "1.", "-2", "123456789012345678901"},
		"id":       {"", "x", "y", "z"}, "revision": {"", "1", "2"}, "reported": {"", "2026-03-09T00:00:00Z", "2026-03-01"},
		"note": {"whatever"},
	}
	columns := [][]string{
		{"series", "date", "events", "exposure"},
		{"series", "start", "end", "events", "exposure", "note"},
		{"date", "series", "exposure"},
		{"series", "at", "events"},
		{"id", "revision", "series", "start", "end", "events", "exposure", "reported"},
		{"series", "date", "at", "events"},
	}
	for seed := range uint64(30) {
		rng := rand.New(rand.NewPCG(seed, 2))
		names := columns[seed%uint64(len(columns))]
		var text strings.Builder
		text.WriteString(strings.Join(names, ",") + "\n")
		for range 400 {
			row := make([]string, len(names))
			for i, name := range names {
				choice := cells[name]
				n := rng.IntN(len(choice))
				if rng.IntN(3) > 0 {
					n = rng.IntN(min(2, len(choice))) // mostly plain
				}
				row[i] = choice[n]
			}
			text.WriteString(strings.Join(row, ",") + "\n")
		}
		opts := Options{Zone: zone(t, "Europe/Berlin"), Ignore: []string{"note"}, NoDerivedIDs: seed%3 != 0}
		if seed%5 == 0 {
			opts.NoDerivedIDs = true
			opts.KeepsIDs = func(string) bool { return false }
		}
		h := sameOnTape(t, opts, write(t, "x.csv", text.String()))
		if len(h.Entries) < 20 || len(h.Faults) < 20 {
			t.Fatalf("seed %d: %d rows, %d faults", seed, len(h.Entries), len(h.Faults))
		}
	}
}

func TestTapeOfNDJSON(t *testing.T) {
	sameOnTape(t, Options{}, write(t, "x.ndjson",
		`{"series":"a","at":"2026-03-02T00:00:00Z","events":1,"reported":"2026-03-09T00:00:00Z"}`+"\n"+
			`{"act":"acknowledge","series":"a","direction":"upper","by":"Ann Example","at":"2026-03-05T00:00:00Z"}`+"\n"+
			`{"id":"x","series":"a","at":"2026-03-03T00:00:00Z","events":1}`+"\n"+
			`{"id":"x","series":"a","revision":1,"retracted":true}`+"\n"))
}

func TestMixedOffsets(t *testing.T) {
	rows := func(offsets ...string) string {
		text := "series,start,end,events\n"
		for i, o := range offsets {
			text += fmt.Sprintf("a,2026-03-%02dT00:00:00%s,2026-03-%02dT00:00:00%s,1\n", i+1, o, i+2, o)
		}
		return text
	}
	berlin := zone(t, "Europe/Berlin")
	for _, c := range []struct {
		text string
		zone *time.Location
		want string
	}{
		{rows("+01:00", "+01:00", "Z", "+01:00"), nil, "[x.csv:4: mixed_offsets: its times have the offset Z, those above +01:00: check that both are meant]"},
		{rows("+01:00", "+02:00"), berlin, "[x.csv:3: mixed_offsets: its times have the offset +02:00, those above +01:00: check that both are meant]"},
		{"series,start,end,events\na,2026-03-28T00:00:00+01:00,2026-03-29T00:00:00+01:00,1\na,2026-03-30T00:00:00+02:00,2026-03-31T00:00:00+02:00,1\n", berlin, "[]"},
		{rows("Z", "Z"), nil, "[]"},
	} {
		tape := &replay.Tape{}
		t.Chdir(t.TempDir())
		writeHere(t, "x.csv", c.text)
		read(t, Options{Tape: tape, ZoneOf: func(string) *time.Location { return c.zone }}, "x.csv")
		if got := fmt.Sprint(replay.Inspect(emptySetup(t), tape).List); got != c.want {
			t.Errorf("%s\n%s\nwant %s", c.text, got, c.want)
		}
	}
}
