package history

import (
	"math/big"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"github.com/parquet-go/parquet-go"

	"tailbell/config"
)

func writeHere(t *testing.T, path, text string) {
	t.Helper()
	if err := os.WriteFile(path, []byte(text), 0o600); err != nil {
		t.Fatal(err)
	}
}

// emptySetup is a set-up that monitors none of the series of these tests.
func emptySetup(t *testing.T) *config.Setup {
	t.Helper()
	setup, err := config.Parse([]byte(strings.NewReplacer("%q", `"1d"`).Replace(`name = "none"
[time]
mode = "history"
[limits]
max_series = 10
max_ids = 1000
[[indicator]]
name = "fall"
series = ["w/*"]
unit = "bed-days"
every = "1d"
zone = "UTC"
events = "counted"
windows = ["7d"]
p_limit = 0.001
[indicator.baseline]
kind = "known"
rate = 1
`)), "test")
	if err != nil {
		t.Fatal(err)
	}
	return setup
}

func writeParquet[T any](t *testing.T, rows []T, options ...parquet.WriterOption) string {
	t.Helper()
	path := filepath.Join(t.TempDir(), "x.parquet")
	if err := parquet.WriteFile(path, rows, options...); err != nil {
		t.Fatal(err)
	}
	return path
}

func TestParquet(t *testing.T) {
	at := time.Date(2026, 3, 2, 10, 15, 0, 250_000_000, time.UTC)
	type moments struct {
		Series   string    `parquet:"series,dict"`
		Start    time.Time `parquet:"start,timestamp(microsecond)"`
		End      time.Time `parquet:"end,timestamp(millisecond)"`
		Reported time.Time `parquet:"reported,timestamp(nanosecond)"`
		Events   *int32    `parquet:"events,optional"`
		Exposure int64     `parquet:"exposure[Device-Days],decimal(2:18)"`
		ID       *string   `parquet:"id,optional"`
		Revision uint64    `parquet:"revision"`
	}
	one, id := int32(1), "lab-1"
	before := at.AddDate(-60, 0, 0)
	path := writeParquet(t, []moments{
		{"a", at, at.Add(time.Hour), at.Add(48 * time.Hour), &one, 2250, &id, 2},
		{"a", at, at.Add(time.Hour), at.Add(49 * time.Hour), nil, 5, &id, 3},
		{"a", before, before.Add(time.Hour), before.Add(2 * time.Hour), &one, 100, nil, 0},
		{"", at, at.Add(time.Hour), at.Add(48 * time.Hour), &one, 0, nil, 0},
	})
	h := sameOnTape(t, Options{NoDerivedIDs: true}, path)
	if diff := cmp.Diff([]string{
		`{"id":"lab-1","series":"a","start":"2026-03-02T10:15:00.25Z","end":"2026-03-02T11:15:00.25Z","events":1,"exposure":22.5,"revision":2,"reported":"2026-03-04T10:15:00.25Z"}`,
		`{"id":"lab-1","series":"a","start":"2026-03-02T10:15:00.25Z","end":"2026-03-02T11:15:00.25Z","exposure":0.05,"revision":3,"reported":"2026-03-04T11:15:00.25Z"}`,
	}, entries(h)); diff != "" {
		t.Error(diff)
	}
	// A revision without an id is refused as in any other file.
	if diff := cmp.Diff([]string{"3 bad_revision", "4 bad_series"}, faults(h)); diff != "" {
		t.Error(diff)
	}
}

func TestParquetOfDays(t *testing.T) {
	type days struct {
		Series   string  `parquet:"series"`
		Date     int32   `parquet:"date,date"`
		Events   float64 `parquet:"events"`
		Exposure float32 `parquet:"exposure"`
		Who      string  `parquet:"who"`
	}
	path := writeParquet(t, []days{{"a", 20514, 3, 21.1, "x"}, {"a", 20515, 0.5, 1, "y"}, {"a", -43464, 0, 1e-7, "z"}})
	h := sameOnTape(t, Options{NoDerivedIDs: true, Zone: zone(t, "Europe/Berlin"), Ignore: []string{"who"}}, path)
	if diff := cmp.Diff([]string{
		`{"series":"a","start":"1850-12-31T23:06:32Z","end":"1851-01-01T23:06:32Z","events":0,"exposure":0.0000001}`,
		`{"series":"a","start":"2026-03-01T23:00:00Z","end":"2026-03-02T23:00:00Z","events":3,"exposure":21.1}`,
	}, entries(h)); diff != "" {
		t.Error(diff)
	}
	if diff := cmp.Diff([]string{"2 bad_events"}, faults(h)); diff != "" {
		t.Error(diff)
	}
	_, err := Read(t.Context(), []string{path}, Options{Zone: time.UTC})
	if err == nil || !strings.Contains(err.Error(), "column 5 is not known") {
		t.Errorf("%v", err)
	}
}

func TestParquetDecimals(t *testing.T) {
	for _, c := range []struct {
		value parquet.Value
		scale int
		want  string
	}{
		{parquet.Int32Value(-1), 2, "-0.01"},
		{parquet.Int64Value(120000), 3, "120"},
		{parquet.Int64Value(0), 6, "0"},
		{parquet.FixedLenByteArrayValue(new(big.Int).SetInt64(123456789).Bytes()), 4, "12345.6789"},
		{parquet.FixedLenByteArrayValue([]byte{0xff, 0xff}), 1, "-0.1"},
	} {
		got, err := decimalOf(nil, c.value, c.scale)
		if err != nil || string(got) != c.want {
			t.Errorf("%v at %d places: %s, %v; want %s", c.value, c.scale, got, err, c.want)
		}
	}
}

func TestDamagedParquet(t *testing.T) {
	type row struct {
		Series string `parquet:"series"`
		Date   int32  `parquet:"date,date"`
		Events int64  `parquet:"events"`
	}
	path := writeParquet(t, []row{{"a", 1, 1}, {"b", 2, 2}})
	whole, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	for n := range len(whole) { // no byte that is wrong may bring it down
		damaged := append([]byte(nil), whole...)
		damaged[n] ^= 0x55
		writeHere(t, path, string(damaged))
		_, err := Read(t.Context(), []string{path}, Options{Zone: time.UTC})
		if err != nil && !strings.Contains(err.Error(), path) {
			t.Fatalf("byte %d: %v", n, err)
		}
	}
	writeHere(t, path, "series,date\n")
	if _, err := Read(t.Context(), []string{path}, Options{Zone: time.UTC}); err == nil {
		t.Error("a table was read as Parquet")
	}
}
