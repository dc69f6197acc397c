package history

import (
	"bytes"
	"context"
	"encoding/csv"
	"fmt"
	"slices"
	"strings"
	"testing"
	"time"

	"tailbell/ingest/wire"
	"tailbell/monitor"
)

// checkRead reads the text and checks what must hold of every history.
func checkRead(t *testing.T, text []byte, opts Options) {
	t.Helper()
	opts.Stdin = bytes.NewReader(text)
	h, err := Read(context.Background(), []string{"-"}, opts)
	if err != nil {
		return
	}
	lines := bytes.Count(text, []byte("\n")) + 1
	if h.Counts.Rows > lines || h.Counts.Rows != len(h.Entries)+len(h.Faults) {
		t.Fatalf("%d rows of %d lines, %d entries, %d faults", h.Counts.Rows, lines, len(h.Entries), len(h.Faults))
	}
	seen := make(map[int]bool)
	for _, f := range h.Faults {
		if f.Reason == "" || f.Detail == "" || f.Line < 1 || f.Line > lines || seen[f.Line] {
			t.Fatalf("fault %+v", f)
		}
		seen[f.Line] = true
	}
	last := monitor.Beginning
	n := 0
	var again bytes.Buffer
	for m := range h.Messages(0) {
		e := h.Entries[n]
		n++
		if e.Time < last || m.Time != e.Time || m.Position != uint64(n) || e.Line < 1 || e.Line > lines || seen[e.Line] {
			t.Fatalf("entry %+v after %d", e, last)
		}
		last, seen[e.Line] = e.Time, true
		if m.Kind == monitor.Rejected || (m.Kind == monitor.Observations && (len(m.Items) != 1 || m.Items[0].Reason != "")) {
			t.Fatalf("entry %s is refused: %+v", e.JSON, m.Items)
		}
		again.Write(e.JSON)
		again.WriteByte('\n')
	}
	second, err := Read(context.Background(), []string{"-"}, Options{Format: NDJSON, Stdin: &again, NoDerivedIDs: true})
	if err != nil {
		t.Fatal(err)
	}
	var canonical, canonicalAgain []string
	for i := range h.Entries {
		canonical = append(canonical, string(h.Entries[i].JSON))
	}
	for i := range second.Entries {
		canonicalAgain = append(canonicalAgain, string(second.Entries[i].JSON))
	}
	slices.Sort(canonical)
	slices.Sort(canonicalAgain)
	// Times of retractions and acts without one may be lost with their place.
	if len(second.Faults) == 0 && !slices.Equal(canonical, canonicalAgain) {
		t.Fatalf("%q, read again %q", canonical, canonicalAgain)
	}
	for _, f := range second.Faults {
		if f.Reason != monitor.BadTime {
			t.Fatalf("read again: %s", f)
		}
	}
}

func FuzzNDJSON(f *testing.F) {
	f.Add([]byte(`{"series":"a","at":"2026-03-02T00:00:00Z","events":1}` + "\n{}\n\n" + `{"id":"x","series":"a","revision":1,"retracted":true}`))
	f.Add([]byte(`{"act":"note","alert":"x","by":"Ann Example","why":"seen","at":"2026-03-05T00:00:00Z"}` + "\r\n7"))
	f.Fuzz(func(t *testing.T, text []byte) {
		checkRead(t, text, Options{Format: NDJSON})
	})
}

func FuzzCSV(f *testing.F) {
	f.Add([]byte("series,at,events,exposure[days]\na/b,2026-03-02T00:00:00Z,1,\n\"a\n/b\",2026-03-02 10:00,,0.5\n"))
	f.Add([]byte("series;date;events\r\na;1851;4\r\n\"a\";2026-03;\"5\"\r\na;\"2026-03-29;1\n"))
	f.Add([]byte("id\tseries\tretracted\trevision\treported\nx\ta\tTRUE\t1\t2026-03-02\n"))
	zone, err := time.LoadLocation("Europe/Berlin")
	if err != nil {
		f.Fatal(err)
	}
	f.Fuzz(func(t *testing.T, text []byte) {
		checkRead(t, text, Options{Format: CSV, Zone: zone, Series: "q/falls"})
	})
}

// FuzzSplitRow holds the cells of a row against the standard library, where
// it accepts the row and no space stands around quotes, which it refuses.
func FuzzSplitRow(f *testing.F) {
	f.Add(`a,"b,""c""",,d`)
	f.Add(`"a`)
	f.Add(` "a" ,b`)
	f.Fuzz(func(t *testing.T, row string) {
		cells, open, ok := splitRow(nil, []byte(row), ',')
		if strings.ContainsAny(row, "\r\n") || row == "" {
			return
		}
		std := csv.NewReader(strings.NewReader(row))
		want, err := std.Read()
		if err != nil {
			return
		}
		if open || !ok || fmt.Sprintf("%q", cells) != fmt.Sprintf("%q", want) {
			t.Fatalf("%q: %q, open %t, ok %t; want %q", row, cells, open, ok, want)
		}
	})
}

func TestRepeatedReadingIsEqual(t *testing.T) {
	path := write(t, "x.csv", "series,at,events\na,2026-03-02T00:00:00Z,1\na,2026-03-01T00:00:00Z,1\na,2026-03-02T00:00:00Z,1\n")
	first, second := read(t, Options{}, path), read(t, Options{}, path)
	if !slices.Equal(entries(first), entries(second)) || entries(first)[1] == entries(first)[2] {
		t.Errorf("%q\n%q", entries(first), entries(second))
	}
	if first.Counts.OutOfOrder != 1 || wire.IsAct(first.Entries[0].JSON) {
		t.Errorf("%+v", first.Counts)
	}
}
