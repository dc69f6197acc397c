package main

import (
	"encoding/csv"
	"encoding/json"
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"github.com/parquet-go/parquet-go"

	"tailbell/monitor/replay/compare"
)

const yearsSetup = `name = "years"
folder = "data"
[time]
mode = "history"
[[indicator]]
name = "falls"
series = ["*/*/falls"]
unit = "bed-days"
every = "1d"
zone = "UTC"
events = "counted"
exposure = "reported"
settle = "1d"
horizon = "60d"
windows = ["7d", "28d"]
tails = ["upper", "lower"]
p_limit = 0.001
quiet = 3
[indicator.baseline]
kind = "known"
rate = 0.02
`

// yearsOfFalls writes two years of falls on many wards, one of which falls out
// of the usual, and a set-up for them.
func yearsOfFalls(t *testing.T) (setup, history string) {
	t.Helper()
	rng := rand.New(rand.NewPCG(5, 5))
	var text strings.Builder
	text.WriteString("series,date,events,exposure[bed-days]\n")
	first := time.Date(2022, 1, 1, 0, 0, 0, 0, time.UTC)
	for day := range 730 {
		for ward := range 60 {
			beds := 15 + rng.IntN(10)
			rate := 0.02
			if ward == 7 && day >= 300 && day < 330 {
				rate = 0.09
			}
			events := 0
			for range beds {
				if rng.Float64() < rate {
					events++
				}
			}
			fmt.Fprintf(&text, "quillmere-%d/ward-%d/falls,%s,%d,%d\n", ward%3, ward, first.AddDate(0, 0, day).Format(time.DateOnly), events, beds)
		}
	}
	return writeSetup(t, yearsSetup), writeHistory(t, "falls.csv", text.String())
}

func writeHistory(t *testing.T, name, text string) string {
	t.Helper()
	path := filepath.Join(t.TempDir(), name)
	if err := os.WriteFile(path, []byte(text), 0o600); err != nil {
		t.Fatal(err)
	}
	return path
}

func readText(t *testing.T, path string) string {
	t.Helper()
	text, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	return string(text)
}

// withoutTime is a summary without how long it took.
func withoutTime(text string) string {
	before, after, _ := strings.Cut(text, "replayed in ")
	_, after, _ = strings.Cut(after, ",")
	return before + after
}

// TestReplayOverCores sees that steps, summary and looks are the same to the
// byte on one core and on several, and that Parquet holds the same looks.
func TestReplayOverCores(t *testing.T) {
	setup, history := yearsOfFalls(t)
	play := func(cores, looks string) (string, string) {
		path := filepath.Join(t.TempDir(), looks)
		code, out, stderr := run(t, "replay", "--config", setup, "--zone", "UTC", "--cores", cores, "--looks", path, history)
		if code != 0 || stderr != "" {
			t.Fatalf("exit code %d\n%s", code, stderr)
		}
		return withoutTime(out), path
	}
	said, one := play("1", "one.csv")
	if !strings.Contains(said, "falls: 60 series over") || !strings.Contains(said, "Ward 7, Quillmere 1") {
		t.Errorf("it says\n%s", said)
	}
	again, three := play("3", "three.csv")
	if diff := cmp.Diff(said, again); diff != "" {
		t.Errorf("one core and three:\n%s", diff)
	}
	if readText(t, one) != readText(t, three) {
		t.Error("the looks of one core and of three differ")
	}
	_, columns := play("2", "looks.parquet")
	rows, err := csv.NewReader(strings.NewReader(readText(t, one))).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	list, err := parquet.ReadFile[lookRow](columns)
	if err != nil {
		t.Fatal(err)
	}
	if len(list) != len(rows)-1 || len(list) != 60*(723+702) {
		t.Fatalf("%d looks in columns, %d in rows", len(list), len(rows)-1)
	}
	for i, r := range list {
		row := rows[i+1]
		got := []string{r.Series, r.Window, utc(r.End), fmt.Sprint(r.Events), r.Exposure, optional(r.Upper.P), fmt.Sprint(*r.Upper.Signals), optional(r.Lower.Log10P)}
		if want := []string{row[0], row[2], row[4], row[7], row[9], row[12], row[16], row[18]}; !slices.Equal(got, want) {
			t.Fatalf("look %d is %v in columns, %v in rows", i, got, want)
		}
	}
}

// TestReplayOfParquet replays the same rows from columns.
func TestReplayOfParquet(t *testing.T) {
	setup, history := yearsOfFalls(t)
	type row struct {
		Series   string `parquet:"series,dict"`
		Date     int32  `parquet:"date,date"`
		Events   int64  `parquet:"events"`
		Exposure int32  `parquet:"exposure[bed-days]"`
	}
	lines, err := csv.NewReader(strings.NewReader(readText(t, history))).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	var rows []row
	for _, line := range lines[1:] {
		day, err := time.Parse(time.DateOnly, line[1])
		if err != nil {
			t.Fatal(err)
		}
		r := row{Series: line[0], Date: int32(day.Unix() / 86400)}
		if _, err := fmt.Sscan(line[2]+" "+line[3], &r.Events, &r.Exposure); err != nil {
			t.Fatal(err)
		}
		rows = append(rows, r)
	}
	path := filepath.Join(t.TempDir(), "falls.parquet")
	if err := parquet.WriteFile(path, rows); err != nil {
		t.Fatal(err)
	}
	want := says(t, 0, nil, "replay", "--config", setup, "--zone", "UTC", history)
	got := says(t, 0, nil, "replay", "--config", setup, "--zone", "UTC", path)
	if diff := cmp.Diff(withoutTime(want), withoutTime(got)); diff != "" {
		t.Error(diff)
	}
}

// TestReplayOfOddRows sees that every odd row is named, and what the exit code
// tells.
func TestReplayOfOddRows(t *testing.T) {
	setup := writeSetup(t, yearsSetup)
	t.Chdir(t.TempDir())
	const head = "series,start,end,events,exposure\n"
	row := func(day int, events string) string {
		return fmt.Sprintf("q/w/falls,2024-03-%02dT00:00:00Z,2024-03-%02dT00:00:00Z,%s,20\n", day, day+1, events)
	}
	for _, c := range []struct {
		name, text string
		code       int
		want       []string
	}{
		{"plain", head + row(1, "0") + row(2, "1"), 0, nil},
		{"broken", head + row(1, "0") + row(2, "x") + row(3, "1"), 1, []string{"h.csv:3: bad_events", "h.csv:4: gap", "1 not usable"}},
		{"refused", head + row(1, "0") + "q/w/falls,2024-03-02T00:00:00Z,2024-03-04T00:00:00Z,1,20\n", 1, []string{"refused: h.csv:3: spans_slots"}},
		{"gap", head + row(1, "0") + row(4, "1"), 3, []string{"h.csv:3: gap: q/w/falls: no events for 2 slots of 1d, from 2024-03-02 until 2024-03-04", "2 gaps"}},
		{"twice", head + row(1, "0") + row(1, "0"), 3, []string{"h.csv:3: duplicate: h.csv:2 says the same", "1 duplicate"}},
		{"unsorted", head + row(2, "0") + row(1, "0"), 3, []string{"h.csv:3: out_of_order: h.csv:2 became known later", "1 row out of order"}},
		{
			"offsets", head + row(1, "0") + "q/w/falls,2024-03-02T01:00:00+01:00,2024-03-03T01:00:00+01:00,0,20\n", 3,
			[]string{"h.csv:3: mixed_offsets: its times have the offset +01:00, those above Z", "1 row with another offset"},
		},
	} {
		t.Run(c.name, func(t *testing.T) {
			if err := os.WriteFile("h.csv", []byte(c.text), 0o600); err != nil {
				t.Fatal(err)
			}
			code, out, stderr := run(t, "replay", "--config", setup, "h.csv")
			if code != c.code {
				t.Errorf("exit code %d, want %d", code, c.code)
			}
			if c.want == nil && stderr != "" {
				t.Errorf("it complains: %s", stderr)
			}
			for _, part := range c.want {
				if !strings.Contains(out+stderr, part) {
					t.Errorf("%q is not said:\n%s%s", part, out, stderr)
				}
			}
		})
	}
}

// TestReplayOfStream replays what was fed to a bus at rest, and a part of it.
func TestReplayOfStream(t *testing.T) {
	setup, history := yearsOfFalls(t)
	says(t, 0, nil, "feed", "--config", setup, "--zone", "UTC", history)
	want := notices(t, says(t, 0, nil, "replay", "--json", "--config", setup, "--zone", "UTC", history))
	got := notices(t, says(t, 0, nil, "replay", "--json", "--config", setup, "--stream"))
	compareNotices(t, "the stream", want, got)
	said := says(t, 0, []string{"of the stream replayed in"}, "replay", "--config", setup, "--stream", "--from", "2022-06-01T00:00:00Z")
	if !strings.Contains(said, "falls: 60 series over 1.57 years") {
		t.Errorf("from June on:\n%s", said)
	}
	says(t, 2, []string{"--from"}, "replay", "--config", setup, "--stream", "--from", "soon")
	says(t, 2, []string{"FILE is missing"}, "replay", "--config", setup)
	says(t, 1, []string{"does not exist"}, "replay", "--config", writeSetup(t, yearsSetup), "--stream")
}

// TestReplayCompares compares two set-ups and a known episode.
func TestReplayCompares(t *testing.T) {
	setup, history := yearsOfFalls(t)
	slow := edited(t, setup, "slow.toml", `["7d", "28d"]`, `["91d"]`)
	known := writeHistory(t, "known.csv", "series,start,end\nquillmere-1/ward-7/falls,2022-10-28,2022-11-27\nquillmere-0/ward-0/falls,2022-02-01,2022-02-03\n")
	said := says(t, 0, []string{"known episodes found", "Neither found 1 known episode.", "not found"},
		"replay", "--config", setup, "--config", slow, "--known", known, "--zone", "UTC", history)
	if !strings.Contains(said, "setup.toml") || !strings.Contains(said, "slow.toml beside setup.toml") || !strings.Contains(said, "Dates are in the zone ") {
		t.Errorf("it says\n%s", said)
	}
	text := says(t, 0, nil, "replay", "--json", "--config", setup, "--config", slow, "--known", known, "--zone", "UTC", history)
	var c compare.Comparison
	if err := json.Unmarshal([]byte(text), &c); err != nil {
		t.Fatal(err)
	}
	ward := c.Episodes[0].Found
	if len(c.Sides) != 2 || ward[0] == nil || ward[1] == nil || *ward[0].Days >= *ward[1].Days || *c.Pairs[0].NeitherEpisodes != 1 {
		t.Errorf("%s", text)
	}
	says(t, 2, []string{"--known goes with a comparison"}, "replay", "--config", setup, "--known", known, history)
	says(t, 2, []string{".csv or .parquet"}, "replay", "--config", setup, "--looks", "x.txt", history)
}
