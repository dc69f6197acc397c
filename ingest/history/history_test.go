package history

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"
	_ "time/tzdata"

	"tailbell/ingest/wire"
	"tailbell/monitor"

	"github.com/google/go-cmp/cmp"
)

// write makes a file and returns its path.
func write(tb testing.TB, name, text string) string {
	tb.Helper()
	path := filepath.Join(tb.TempDir(), name)
	if err := os.WriteFile(path, []byte(text), 0o600); err != nil {
		tb.Fatal(err)
	}
	return path
}

func read(tb testing.TB, opts Options, paths ...string) *History {
	tb.Helper()
	h, err := Read(context.Background(), paths, opts)
	if err != nil {
		tb.Fatal(err)
	}
	kept := len(h.Entries)
	if opts.Tape != nil {
		kept = opts.Tape.Len()
	}
	if n := h.Counts.Observations + h.Counts.Acts; n != kept || n+len(h.Faults) != h.Counts.Rows {
		tb.Errorf("counts %+v, %d entries, %d faults", h.Counts, len(h.Entries), len(h.Faults))
	}
	return h
}

// faults returns the faults in short: line and reason.
func faults(h *History) []string {
	var list []string
	for _, f := range h.Faults {
		list = append(list, fmt.Sprintf("%d %s", f.Line, f.Reason))
	}
	return list
}

func entries(h *History) []string {
	var list []string
	for _, e := range h.Entries {
		list = append(list, string(e.JSON))
	}
	return list
}

func zone(tb testing.TB, name string) *time.Location {
	tb.Helper()
	z, err := time.LoadLocation(name)
	if err != nil {
		tb.Fatal(err)
	}
	return z
}

func TestCSV(t *testing.T) {
	text := "\xEF\xBB\xBFid, series ,start,end,at,Events,exposure[device-days],revision,reported,retracted\r\n" +
		`a1,q/w/line,2026-03-02T00:00:00+01:00,2026-03-03T00:00:00+01:00,,1,22.50,2,2026-03-05T09:10:00+01:00,` + "\r\n" +
		"\r\n" +
		`"a""2", q/w/line ,,,2026-03-02T10:00:00Z, 1 ,,,,false` + "\r\n" +
		`a1,q/w/line,,,,,,3,2026-03-06T00:00:00Z,TRUE` + "\r\n" +
		`,q/w/line,2026-03-02T00:00:00Z,2026-03-03T00:00:00Z,,,0,,,`
	h := read(t, Options{}, write(t, "x.CSV", text))
	if diff := cmp.Diff([]string{
		`{"id":"a\"2","series":"q/w/line","at":"2026-03-02T10:00:00Z","events":1}`,
		`{"id":"row-4edbc86b0a34144fa567537fb5d94d57","series":"q/w/line","start":"2026-03-02T00:00:00Z","end":"2026-03-03T00:00:00Z","exposure":0}`,
		`{"id":"a1","series":"q/w/line","start":"2026-03-01T23:00:00Z","end":"2026-03-02T23:00:00Z","events":1,"exposure":22.5,"revision":2,"reported":"2026-03-05T08:10:00Z"}`,
		`{"id":"a1","series":"q/w/line","revision":3,"reported":"2026-03-06T00:00:00Z","retracted":true}`,
	}, entries(h)); diff != "" {
		t.Error(diff)
	}
	if diff := cmp.Diff(Counts{Files: 1, Rows: 4, Observations: 4, OutOfOrder: 2, DerivedIDs: 1}, h.Counts); diff != "" {
		t.Error(diff)
	}
	if e := h.Entries[2]; e.Line != 2 || filepath.Base(e.File) != "x.CSV" || e.Time != monitor.InstantOf(time.Date(2026, 3, 5, 8, 10, 0, 0, time.UTC)) || e.Kind() != "obs" {
		t.Errorf("%+v", e)
	}
}

func TestSeparators(t *testing.T) {
	for _, c := range []string{",", ";", "\t"} {
		text := strings.ReplaceAll("series|at|events\na/b|2026-03-02T00:00:00Z|1\n", "|", c)
		if h := read(t, Options{}, write(t, "x.csv", text)); h.Counts.Observations != 1 {
			t.Errorf("%q: %v", c, h.Faults)
		}
	}
}

// A bad row is reported with its line and bytes, and the rest goes on.
func TestBadRows(t *testing.T) {
	good := "a/b,2026-03-02T00:00:00Z,1,\n"
	text := "series,at,events,exposure\n" + good +
		"a/b,2026-03-02T00:00:00Z,\"1,5\",\n" + // 3
		"a/b,2026-03-02T00:00:00Z\n" + // 4
		"a/b,2026-03-02T00:00:00Z,1,,\n" + // 5
		"a b,2026-03-02T00:00:00Z,1,\n" + // 6
		"a/b,2026-03-02T00:00:00,1,\n" + // 7
		"a/b,2026-03-02T00:00:00Z,,\n" + // 8
		"a/b,2026-03-02T00:00:00Z,-1,\n" + // 9
		"\"a/b,2026-03-02T00:00:00Z,1,\n" + // 10
		good +
		"\"a/\n\nb\",2026-03-02T00:00:00Z,1,\n" + // 12
		"a/b,2026-03-02T00:00:00Z,1,0x1p3\n" + // 15
		"a/b,2026-03-02T00:00:00Z,1,\"7\n" + // 16
		"a/b,2026-03-02T00:00:00Z,1,\"7\"8\n" + // 17
		"a/b,\"2026-03-02T00:00:00Z\" ,1,\"7\"\n" +
		"\xff,2026-03-02T00:00:00Z,1,\n" + // 19
		",2026-03-02T00:00:00Z,1,\n" + // 20
		"a/b,2026-03-02T00:00:00Z,01,\n" + // 21
		strings.Repeat("x", 3<<20) + "\n" + // 22
		good
	h := read(t, Options{}, write(t, "x.csv", text))
	if diff := cmp.Diff([]string{
		"3 bad_events", "4 bad_row", "5 bad_row", "6 bad_series", "7 bad_time", "8 nothing_reported", "9 bad_events", "10 bad_row",
		"12 bad_series", "15 bad_exposure", "16 bad_row", "17 bad_row", "19 not_utf8", "20 bad_series", "21 bad_events", "22 too_large",
	}, faults(h)); diff != "" {
		t.Error(diff)
	}
	if h.Counts.Observations != 4 {
		t.Errorf("%d observations", h.Counts.Observations)
	}
	f := h.Faults[0]
	if got, want := fmt.Sprintf("%s %q", f.String()[strings.LastIndex(f.String(), "x.csv"):], f.Raw),
		`x.csv:3: bad_events: "1,5" is no number; events is a whole number such as 0 or 12 "a/b,2026-03-02T00:00:00Z,\"1,5\","`; got != want {
		t.Errorf("%s\nwant %s", got, want)
	}
	if last := h.Faults[len(h.Faults)-1]; len(last.Raw) != maxFaultBytes {
		t.Errorf("kept %d bytes of a long line", len(last.Raw))
	}
}

// A quote that closes lines later counts only if the cells then fit.
func TestStrayQuotes(t *testing.T) {
	text := "series,at,events,exposure\n" +
		"\"a,2026-03-02T00:00:00Z,1,\n" +
		"b\",2026-03-02T00:00:00Z,1\n" +
		"c,2026-03-02T00:00:00Z,1,\n"
	h := read(t, Options{}, write(t, "x.csv", text))
	if !slices.Equal(faults(h), []string{"2 bad_row", "3 bad_row"}) || h.Counts.Observations != 1 {
		t.Errorf("%v, %+v", faults(h), h.Counts)
	}
}

func TestLocalTimes(t *testing.T) {
	text := "series,date,start,end,at,reported,events\n" +
		"a,2026-03-29,,,,,1\n" + // a day of 23 hours
		"a,2026-10,,,,,2\n" +
		"a,1851,,,,,3\n" +
		"a,,2026-03-02,2026-03-03,,,4\n" +
		"a,,,,2026-03-02 14:30,,5\n" +
		"a,,,,2026-03-02T14:30:05.25,2026-03-04,6\n" +
		"a,,,,2026-03-02T14:30:05Z,,7\n" +
		"a,,,,2026-03-29T02:30,,8\n" + // never
		"a,,,,2026-10-25T02:30,,9\n" + // twice
		"a,,,,2026-10-25T02:30:00+01:00,,10\n" +
		"a,2026-02-30,,,,,11\n" +
		"a,2026-03-02,2026-03-02,,,,12\n" +
		"a,2026-03-02,,,2026-03-02,,13\n"
	h := read(t, Options{Zone: zone(t, "Europe/Berlin"), NoDerivedIDs: true}, write(t, "x.csv", text))
	slices.SortFunc(h.Entries, func(a, b Entry) int { return a.Line - b.Line })
	if diff := cmp.Diff([]string{
		`{"series":"a","start":"2026-03-28T23:00:00Z","end":"2026-03-29T22:00:00Z","events":1}`,
		`{"series":"a","start":"2026-09-30T22:00:00Z","end":"2026-10-31T23:00:00Z","events":2}`,
		`{"series":"a","start":"1850-12-31T23:06:32Z","end":"1851-12-31T23:06:32Z","events":3}`,
		`{"series":"a","start":"2026-03-01T23:00:00Z","end":"2026-03-02T23:00:00Z","events":4}`,
		`{"series":"a","at":"2026-03-02T13:30:00Z","events":5}`,
		`{"series":"a","at":"2026-03-02T13:30:05.25Z","events":6,"reported":"2026-03-03T23:00:00Z"}`,
		`{"series":"a","at":"2026-03-02T14:30:05Z","events":7}`,
		`{"series":"a","at":"2026-10-25T01:30:00Z","events":10}`,
	}, entries(h)); diff != "" {
		t.Error(diff)
	}
	if diff := cmp.Diff([]string{"9 bad_time", "10 bad_time", "12 bad_time", "13 bad_interval", "14 bad_interval"}, faults(h)); diff != "" {
		t.Error(diff)
	}
}

func TestFilesThatCannotBeRead(t *testing.T) {
	for _, c := range []struct{ name, text, want string }{
		{"x.csv", "", "the file is empty"},
		{"x.csv", "series,at,event\n", "line 1: the name of column 3 is not known (is it events, misspelt?)"},
		{"x.csv", "series,at,events,at\n", "line 1: the column at is there twice"},
		{"x.csv", "\n\nseries,at,exposure,exposure[days]\n", "line 3: the column exposure is there twice"},
		{"x.csv", "series,at,exposure[]\n", "states no unit"},
		{"x.csv", "at,events\n", "no column series"},
		{"x.csv", "series,events\n", "no column says when"},
		{"x.csv", "series,date,events\n", "in which zone"},
		{"x.csv", "series,\"date,events\n", "unmatched quotes"},
		{"x.json", "\n [{}]", "one JSON array"},
		{"x.txt", "", "tells no format"},
	} {
		_, err := Read(context.Background(), []string{write(t, c.name, c.text)}, Options{})
		if err == nil || !strings.Contains(err.Error(), c.want) || !strings.Contains(err.Error(), c.name) {
			t.Errorf("%q: %v, want %q", c.text, err, c.want)
		}
	}
	if _, err := Read(context.Background(), []string{filepath.Join(t.TempDir(), "none.csv")}, Options{}); !errors.Is(err, os.ErrNotExist) {
		t.Errorf("missing file: %v", err)
	}
	if _, err := Read(context.Background(), []string{"-"}, Options{Stdin: strings.NewReader("")}); err == nil {
		t.Error("standard input without a format was read")
	}
}

func TestOptions(t *testing.T) {
	path := write(t, "x.csv", "at,events,Comment,exposure[Bed-days]\n2026-03-02T00:00:00Z,1,\"two\nlines\",\n2026-03-02T00:00:00Z,,x,2\n")
	var asked []string
	h := read(t, Options{
		Series: "q/falls", Ignore: []string{"comment"}, Format: CSV,
		CheckUnit: func(series, unit string) error {
			asked = append(asked, series+" "+unit)
			return errors.New("counted in hours")
		},
	}, path)
	if h.Counts.Observations != 1 || !slices.Equal(faults(h), []string{"4 bad_exposure"}) {
		t.Errorf("%+v %v", h.Counts, h.Faults)
	}
	if !slices.Equal(asked, []string{"q/falls Bed-days"}) {
		t.Errorf("asked for %v", asked)
	}
	var last Progress
	size, err := os.Stat(path)
	if err != nil {
		t.Fatal(err)
	}
	read(t, Options{Series: "q/falls", Ignore: []string{"comment"}, Progress: func(p Progress) { last = p }}, path, path)
	if want := (Progress{File: path, Read: 2 * size.Size(), Size: 2 * size.Size(), Rows: 4}); last != want {
		t.Errorf("progress %+v, want %+v", last, want)
	}
	h = read(t, Options{Format: NDJSON, Stdin: strings.NewReader(`{"series":"a","at":"2026-03-02T00:00:00Z","events":1}`)}, "-")
	if h.Counts.Observations != 1 || h.Entries[0].File != "standard input" {
		t.Errorf("%+v", h)
	}
	ctx, cancel := context.WithCancel(context.Background())
	cancel()
	long := write(t, "x.ndjson", strings.Repeat("\n", 10_000))
	if _, err := Read(ctx, []string{long}, Options{}); !errors.Is(err, context.Canceled) {
		t.Errorf("a cancelled reading: %v", err)
	}
}

func TestNDJSON(t *testing.T) {
	text := `{"series":"a","at":"2026-03-02T00:00:00Z","events":1,"reported":"2026-03-09T00:00:00Z"}` + "\r\n" +
		"hello\n" +
		`{"act":"acknowledge","series":"a","direction":"upper","by":"Ann Example","at":"2026-03-05T00:00:00Z"}` + "\n" +
		`{"act":"note","alert":"x","by":"Ann Example","why":"seen"}` + "\n" +
		`{"act":"note","alert":"x","by":"Ann Example"}` + "\n" +
		`[{"series":"a","at":"2026-03-02T00:00:00Z","events":1}]` + "\n" +
		`{"id":"x","series":"a","revision":1,"retracted":true}` + "\n\n" +
		`{"id":"act","series":"a","at":"2026-03-04T00:00:00Z","events":3e0}`
	first := write(t, "x.jsonl", text)
	h := read(t, Options{NoDerivedIDs: true}, first)
	if diff := cmp.Diff([]string{
		`{"id":"act","series":"a","at":"2026-03-04T00:00:00Z","events":3}`,
		`{"act":"acknowledge","series":"a","direction":"upper","by":"Ann Example","at":"2026-03-05T00:00:00Z"}`,
		`{"series":"a","at":"2026-03-02T00:00:00Z","events":1,"reported":"2026-03-09T00:00:00Z"}`,
		`{"act":"note","alert":"x","by":"Ann Example","why":"seen"}`,
		`{"id":"x","series":"a","revision":1,"retracted":true}`,
	}, entries(h)); diff != "" {
		t.Error(diff)
	}
	if diff := cmp.Diff([]string{"2 not_json", "5 bad_act", "6 not_object"}, faults(h)); diff != "" {
		t.Error(diff)
	}
	second := write(t, "y.ndjson", `{"id":"x","series":"a","revision":1,"retracted":true}`+"\n"+`{"act":"note","alert":"x","by":"y","why":"z"}`+"\n")
	if got := faults(read(t, Options{}, first, second)); !slices.Equal(got[3:], []string{"1 bad_time", "2 bad_time"}) {
		t.Errorf("a retraction and an act before any time: %v", got)
	}
}

// The digests are those that the program sha256sum gives for the canonical rows.
func TestDerivedIDs(t *testing.T) {
	row := `{"series":"a","at":"2026-03-02T00:00:00Z","events":1}` + "\n"
	other := `{"events":1.0,"series":"a","at":"2026-03-02T01:00:00+01:00"}` + "\n" // equal, otherwise written
	x, y := write(t, "x.ndjson", row+other+strings.Replace(row, ":1}", ":2}", 1)), write(t, "y.ndjson", row)
	h := read(t, Options{}, x, y, x)
	ids := make(map[string]int)
	for _, e := range h.Entries {
		ids[wire.NewDecoder(wire.Limits{}).Observation(e.JSON).Observation.ID]++
	}
	if diff := cmp.Diff(map[string]int{
		"row-aa498a7b99eb442214589e475710f124": 3, "row-aa498a7b99eb442214589e475710f124-2": 2, "row-9e8db49258a8fcb1ef403ba7c66bdce0": 2,
	}, ids); diff != "" {
		t.Error(diff)
	}
}

// A replay gives the engine what a feed through the bus would give it.
func TestMessages(t *testing.T) {
	text := `{"id":"x","series":"a","at":"2026-03-02T00:00:00Z","events":1}` + "\n" +
		`{"id":"x","series":"a","revision":1,"retracted":true}` + "\n" +
		`{"act":"note","alert":"x","by":"y","why":"z"}` + "\n"
	h := read(t, Options{}, write(t, "x.ndjson", text))
	d := wire.NewDecoder(wire.Limits{})
	n := 0
	for m := range h.Messages(41) {
		e := &h.Entries[n]
		want := d.Decode(wire.Raw{
			Position: uint64(42 + n), Stored: e.Time.Time(), Subject: "quillmere.in.0." + e.Kind(),
			Header: map[string][]string{wire.TimeHeader: {wire.FormatTime(e.Time)}}, Data: e.JSON,
		})
		if diff := cmp.Diff(want, m); diff != "" || m.Kind == monitor.Rejected {
			t.Error(diff)
		}
		n++
		if n == 2 {
			continue
		}
	}
	if n != 3 {
		t.Errorf("%d messages", n)
	}
	for range h.Messages(0) {
		break
	}
}
