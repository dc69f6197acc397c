package main

import (
	"encoding/json"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"tailbell/exact"
)

// ranLimits runs the command and returns what it printed.
func ranLimits(t *testing.T, want int, args ...string) (stdout, stderr string) {
	t.Helper()
	var out, err strings.Builder
	if code := execute(t.Context(), append([]string{"limits"}, args...), strings.NewReader(""), &out, &err); code != want {
		t.Fatalf("%v: exit code %d, want %d:\n%s%s", args, code, want, out.String(), err.String())
	}
	return out.String(), err.String()
}

func limitsOf(t *testing.T, args ...string) []limitsJSON {
	t.Helper()
	out, _ := ranLimits(t, 0, append(args, "--json", "--draws", "200")...)
	var list []limitsJSON
	if err := json.Unmarshal([]byte(out), &list); err != nil {
		t.Fatal(err)
	}
	return list
}

var aWard = []string{"--baseline", "1.8", "--per", "1000", "--exposure", "22", "--window", "28d", "--window", "84d:7d"}

// TestLimitsDescribed: figures of a series as described, against the laws
// themselves.
func TestLimitsDescribed(t *testing.T) {
	r := limitsOf(t, append(aWard, "--p-limit", "0.001", "--of", "14")...)[0]
	for i, mean := range []float64{0.0018 * 22 * 28, 0.0018 * 22 * 84} {
		part := r.Reports[0].Parts[i]
		k, size, _ := exact.Poisson{Rate: mean, Exposure: 1}.CriticalUpper(0.001)
		if part.Critical == nil || *part.Critical != k || math.Abs(part.Size-size) > 1e-12 || math.Abs(part.Expected-mean) > 1e-12 {
			t.Errorf("%+v, want %d with %v", part, k, size)
		}
	}
	all, each := r.InAll, r.Reports[0]
	if all.Series != 14 || math.Abs(all.PerYear-14*each.PerYear) > 1e-12 || each.PerYear <= 0 {
		t.Errorf("%+v in all, %v each", all, each.PerYear)
	}
	// At most one in five years, whatever the exposures within their range.
	kept := limitsOf(t, append(aWard, "--allowance", "1 in 5y", "--vary", "0.3")...)[0].Reports[0]
	if kept.PerYear > 0.2 || kept.PerYear < 0.05 {
		t.Errorf("%v a year of 0.2", kept.PerYear)
	}
}

// TestLimitsPage: all of it is said, and what is exact beside it.
func TestLimitsPage(t *testing.T) {
	figure := filepath.Join(t.TempDir(), "limits.svg")
	out, _ := ranLimits(t, 0, "--reference-events", "36", "--reference-exposure", "20000", "--exposure", "22", "--window", "28d", "--allowance", "1 in 5y",
		"--tails", "upper,lower", "--draws", "200", "--of", "14", "--looks", "slot,arrival", "--figure", figure)
	for _, want := range []string{
		"allowance: 1 in 5y on each series", "LIMITS", "at the baseline's bounds", "average over the estimate", "On all 14 series",
		"28d at events", "28d, too few", "It can never signal", "WHAT A LOOK FINDS", "HOW LONG CHANGES GO UNNOTICED (simulated)",
		"exact 95 % bounds", "ONE STEP OF THE CRITICAL COUNT", "diagnoses nothing", "no proof of safety", "Local policy",
	} {
		if !strings.Contains(strings.Join(strings.Fields(out), " "), want) {
			t.Errorf("%q is not said in:\n%s", want, out)
		}
	}
	if svg, err := os.ReadFile(figure); err != nil || !strings.Contains(string(svg), "<svg") {
		t.Errorf("the figure: %v", err)
	}
	again, _ := ranLimits(t, 0, append(aWard, "--p-limit", "0.001", "--draws", "200")...)
	if same, _ := ranLimits(t, 0, append(aWard, "--p-limit", "0.001", "--draws", "200")...); same != again {
		t.Error("the same command says something else")
	}
}

const limitsSetup = `name = "quillmere"
folder = "data"
[[indicator]]
name = "fall"
series = ["quillmere-*/*/fall"]
unit = "bed-days"
per = 1000
every = "1d"
zone = "UTC"
events = "counted"
windows = ["28d"]
p_limit = 0.001
[[indicator.baseline]]
kind = "known"
series = "quillmere-east/**"
rate = 4
[[indicator.baseline]]
kind = "trailing"
span = "56d"
gap = "28d"
min_events = 3
`

// TestLimitsOfSetup: baselines with a said exposure, series with a counted one,
// a limit and an allowance put in the place of the set-up's.
func TestLimitsOfSetup(t *testing.T) {
	folder := t.TempDir()
	file, rows := filepath.Join(folder, "tailbell.toml"), filepath.Join(folder, "falls.csv")
	var csv strings.Builder
	csv.WriteString("series,start,end,events,exposure\n")
	for day := range 120 {
		at := func(n int) string { return time.Date(2026, 1, 1+n, 0, 0, 0, 0, time.UTC).Format(time.RFC3339) }
		for ward, beds := range map[string]int{"quillmere-east/ward-1": 20 + day%3, "quillmere-north/ward-2": 30, "quillmere-north/ward-3": 8} {
			events := "0"
			if ward == "quillmere-north/ward-2" && day%10 == 0 {
				events = "1"
			}
			csv.WriteString(ward + "/fall," + at(day) + "," + at(day+1) + "," + events + "," + plain(float64(beds)) + "\n")
		}
	}
	for name, text := range map[string]string{file: limitsSetup, rows: csv.String()} {
		if err := os.WriteFile(name, []byte(text), 0o600); err != nil {
			t.Fatal(err)
		}
	}
	g := limitsOf(t, "--config", file, rows)[0]
	if len(g.Reports) != 2 || len(g.Withheld) != 1 || g.Withheld[0] != "quillmere-north/ward-3/fall" {
		t.Fatalf("%d reports, withheld %v", len(g.Reports), g.Withheld)
	}
	east, north := g.Reports[0], g.Reports[1]
	if math.Abs(east.Exposure-21) > 0.1 || math.Abs(east.UsualRate-0.004) > 1e-15 || east.Series != "quillmere-east/ward-1/fall" {
		t.Errorf("%+v", east)
	}
	// 56 days that end 28 before the last hold 5 or 6 of the events of every tenth.
	if rate := north.UsualRate * 30 * 56; math.Abs(rate-6) > 1.01 || north.Exposure != 30 {
		t.Errorf("%+v", north)
	}
	if kept := limitsOf(t, "--config", file, "--allowance", "1 in 5y", rows)[0].Reports[0]; kept.PerYear > 0.2 || math.Abs(kept.Vary-1./21) > 0.01 {
		t.Errorf("%+v", kept)
	}
	_, stderr := ranLimits(t, 1, "--config", file, "--exposure", "20")
	if !strings.Contains(stderr, "a trailing baseline is counted from history") {
		t.Error(stderr)
	}
	_, stderr = ranLimits(t, 1, "--config", file)
	if !strings.Contains(stderr, "how much exposure has a slot?") {
		t.Error(stderr)
	}
}

// TestLimitsUsage: what makes no sense is said, with how to mend it.
func TestLimitsUsage(t *testing.T) {
	for want, args := range map[string][]string{
		"which windows?":               {"--baseline", "1", "--exposure", "1", "--p-limit", "0.01"},
		"how many false alerts":        {"--baseline", "1", "--exposure", "1", "--window", "28d"},
		"is not a number of false":     append(aWard, "--allowance", "seldom"),
		"the step is longer":           {"--baseline", "1", "--exposure", "1", "--p-limit", "0.01", "--window", "7d:8d"},
		"no fixed number of days":      {"--baseline", "1", "--exposure", "1", "--p-limit", "0.01", "--window", "1mo"},
		"--ratios has 0.5":             append(aWard, "--p-limit", "0.01", "--ratios", "0.5"),
		"--p-limit is 0.7":             append(aWard, "--p-limit", "0.7"),
		"describes a series by itself": {"--window", "28d"},
		"leave out --config and files": append(aWard, "--p-limit", "0.01", "--config", "x.toml"),
		"--assurance means nothing":    append(aWard, "--p-limit", "0.01", "--assurance", "0.9"),
		"a rate of -1 is not above 0":  {"--baseline", "-1", "--exposure", "1", "--p-limit", "0.01", "--window", "28d"},
		"give only one of":             append(aWard, "--p-limit", "0.01", "--allowance", "1 in 5y"),
		"--reference-events goes with": {"--reference-events", "3", "--exposure", "1", "--window", "28d", "--p-limit", "0.01"},
		"must end in .svg or .png":     append(aWard, "--p-limit", "0.01", "--figure", "x.pdf"),
		"the exposure of a slot is -2": {"--baseline", "1", "--exposure", "-2", "--window", "28d", "--p-limit", "0.01"},
		"1e+30 events expected a slot": {"--baseline", "1e15", "--exposure", "1e15", "--window", "28d", "--p-limit", "0.01"},
		"a proportion of 1.5":          {"--baseline", "1.5", "--trials", "5", "--window", "28d", "--p-limit", "0.01"},
		`--tails has "both"`:           append(aWard, "--p-limit", "0.01", "--tails", "both"),
		"arrival looks watch for more": append(aWard, "--p-limit", "0.01", "--tails", "lower", "--looks", "arrival"),
	} {
		if _, stderr := ranLimits(t, 2, args...); !strings.Contains(stderr, want) {
			t.Errorf("%v: %q is not said in %s", args, want, stderr)
		}
	}
}

func TestLimitsNameAnySeries(t *testing.T) {
	path := filepath.Join(t.TempDir(), "tailbell.toml")
	if err := os.WriteFile(path, []byte(archiveSetup), 0o600); err != nil {
		t.Fatal(err)
	}
	if out := output(t, "limits", "--config", path, "--exposure", "22", "--draws", "100"); !strings.HasPrefix(out, "fall (fall): any series\n") {
		t.Error(out)
	}
}
