package main

import (
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"tailbell/exact"
)

var lastTrials = []string{"--baseline", "0.01", "--trials", "8", "--looks", "arrival", "--window", "200 trials"}

// TestLimitsTrials: figures of a window of trials against the law itself.
func TestLimitsTrials(t *testing.T) {
	r := limitsOf(t, append(lastTrials, "--allowance", "1 in 2y")...)[0].Reports[0]
	part := r.Parts[0]
	want := 8*365.2425*exact.TrialCrossing(0.01, 200, 7) + 0.5*exact.NewBinomial(200, 0.01).Upper(7)
	if part.Critical == nil || *part.Critical != 7 || math.Abs(part.PerYear-want) > 1e-9 || math.Abs(part.Expected-2) > 1e-12 || part.Looks != "arrival" {
		t.Errorf("%+v, want 7 and %v", part, want)
	}
	if d := part.Delays[len(part.Delays)-1]; d.Found != d.Draws || *d.Half.Slots < 5 || *d.Half.Slots > 25 { // 5 times: 7 of 17 or so trials at 1 in 20
		t.Errorf("at five times the usual: %+v", d)
	}
	out, _ := ranLimits(t, 0, append(lastTrials, "--allowance", "1 in 2y", "--draws", "200")...)
	for _, say := range []string{"windows of trials: 2,922 trials a year, taken to come one at a time", "200 trials at events"} {
		if !strings.Contains(out, say) {
			t.Errorf("%q is not said in:\n%s", say, out)
		}
	}
}

// TestLimitsTrialsRefused: windows that are never looked at.
func TestLimitsTrialsRefused(t *testing.T) {
	for _, test := range []struct {
		args []string
		say  string
	}{
		{[]string{"--trials", "8", "--window", "200 trials"}, "say --looks arrival"},
		{[]string{"--exposure", "8", "--window", "200 trials", "--looks", "arrival"}, "say --trials"},
		{[]string{"--trials", "8", "--window", "28d", "--looks", "slot,arrival"}, "the last so many trials"},
		{[]string{"--trials", "8", "--window", "28d", "--window", "200 trials", "--looks", "arrival"}, "add slot"},
		{[]string{"--trials", "8", "--window", "1 trials", "--looks", "arrival"}, `write e.g. "200 trials"`},
		{[]string{"--trials", "8", "--window", "200 trials", "--looks", "arrival", "--spread", "2"}, "without spread"},
	} {
		_, stderr := ranLimits(t, 2, append(test.args, "--baseline", "0.01", "--allowance", "1 in 2y")...)
		if !strings.Contains(stderr, test.say) {
			t.Errorf("%v: %s", test.args, stderr)
		}
	}
}

// TestLimitsTrialsCounted: how many trials a year brings is what the busiest four
// weeks of a history do.
func TestLimitsTrialsCounted(t *testing.T) {
	folder := t.TempDir()
	setup, rows := filepath.Join(folder, "set-up.toml"), filepath.Join(folder, "rows.csv")
	const text = `name = "quillmere"
[[indicator]]
name = "wound-infection"
series = ["quillmere/*"]
measure = "proportion"
unit = "operations"
every = "1d"
events = "each"
windows = ["200 trials"]
looks = "arrival"
allowance = "1 in 2y"
[indicator.baseline]
kind = "known"
rate = 0.01
`
	var b strings.Builder
	b.WriteString("series,at,events,exposure\n")
	day := time.Date(2026, 1, 5, 0, 0, 0, 0, time.UTC)
	for i := range 84 { // 2 a day, and 6 a day in four weeks of them
		n := 2
		if i >= 28 && i < 56 {
			n = 6
		}
		for j := range n {
			fmt.Fprintf(&b, "quillmere/a,%s,0,1\n", day.AddDate(0, 0, i).Add(time.Duration(8+j)*time.Hour).Format(time.RFC3339))
		}
	}
	for file, data := range map[string]string{setup: text, rows: b.String()} {
		if err := os.WriteFile(file, []byte(data), 0o600); err != nil {
			t.Fatal(err)
		}
	}
	out, _ := ranLimits(t, 0, "--config", setup, rows, "--draws", "100")
	if say := "windows of trials: 2,191 operations a year, as many as in the busiest four weeks"; !strings.Contains(out, say) {
		t.Errorf("%q is not said in:\n%s", say, out)
	}
}
