package main

import (
	"encoding/json"
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"tailbell/alert/words"
	"tailbell/monitor/life"
)

// recomputation is what "tailbell exact --json" says, as far as a record says it too.
type recomputation struct {
	P        float64 `json:"p"`
	Lower    float64 `json:"rate_lower"`
	Upper    float64 `json:"rate_upper"`
	RatioLow float64 `json:"ratio_lower"`
	Critical int64   `json:"critical_count"`
	Size     float64 `json:"attained_size"`
}

// TestRecompute runs the command line that stands in each alert of the demo
// and of the two published data sets: its numbers must be the record's, p, the
// bounds and the attained size to the last digit but one (a rate that is
// written per 1,000 is rounded once more).
func TestRecompute(t *testing.T) {
	demo := filepath.Join(t.TempDir(), "demo.ndjson")
	if code, _, stderr := run(t, "demo", "--json", "--export", demo); code != 0 {
		t.Fatal(stderr)
	}
	histories := map[string][]string{
		"demo":        {"--config", demo + ".toml", demo},
		"coal":        {"--config", "../../testdata/coal/coal.toml", "--zone", "UTC", "../../testdata/coal/coal.csv"},
		"horse kicks": {"--config", "../../testdata/horsekicks/horsekicks.toml", "--zone", "UTC", "--until", "1895-02-01", "../../testdata/horsekicks/horsekicks.csv"},
	}
	histories["margins"] = margins(t)
	histories["arrivals"] = arrivals(t)
	for name, args := range histories {
		t.Run(name, func(t *testing.T) {
			_, text, stderr := run(t, append([]string{"replay", "--json"}, args...)...)
			seen := map[string]bool{}
			for _, line := range notices(t, text) {
				var n life.Notice
				if err := json.Unmarshal([]byte(line), &n); err != nil {
					t.Fatal(err)
				}
				if e := n.Step.Evidence; e != nil && !seen[e.Recompute] {
					seen[e.Recompute] = true
					recomputed(t, e)
				}
			}
			if len(seen) == 0 {
				t.Errorf("no look to recompute\n%s", stderr)
			}
		})
	}
}

// margins is an invented history with margins: too many falls, then too few, by a
// known rate and by a reference, and so for wound infections in trials.
func margins(t *testing.T) []string {
	t.Helper()
	folder := t.TempDir()
	setup := "name = \"margins\"\nfolder = \"x\"\n[time]\nmode = \"history\"\n"
	for _, kind := range []struct{ name, measure, unit, baseline string }{
		{"fall", "rate", "bed-days", "kind = \"known\"\nrate = 6"},
		{"slip", "rate", "bed-days", "kind = \"reference\"\nevents = 60\nexposure = 10000"},
		{"wound", "proportion", "procedures", "kind = \"known\"\nrate = 0.06"},
		{"burn", "proportion", "procedures", "kind = \"reference\"\nevents = 60\nexposure = 1000"},
	} {
		setup += fmt.Sprintf("[[indicator]]\nname = %q\nseries = [\"*/%s\"]\nmeasure = %q\nunit = %q\nper = 1000\nevery = \"1d\"\nzone = \"UTC\"\n"+
			"windows = [\"7d\"]\ntails = [\"upper\", \"lower\"]\np_limit = 0.01\nquiet = 3\n[indicator.baseline]\n%s\nmargin = 1.2\n",
			kind.name, kind.name, kind.measure, kind.unit, kind.baseline)
	}
	rows := "series,date,events,exposure\n"
	for d := range 56 {
		date := time.Date(2026, 1, 1+d, 0, 0, 0, 0, time.UTC).Format(time.DateOnly)
		many := 3 - 3*(d/14%2) // a fortnight of too many, one of none
		rows += fmt.Sprintf("ward/fall,%s,%d,%d\nward/slip,%s,%d,%d\n", date, many*2, 210, date, many*2, 210)
		rows += fmt.Sprintf("ward/wound,%s,%d,%d\nward/burn,%s,%d,%d\n", date, many*2, 30, date, many*2, 30)
	}
	for name, text := range map[string]string{"s.toml": setup, "h.csv": rows} {
		if err := os.WriteFile(filepath.Join(folder, name), []byte(text), 0o600); err != nil {
			t.Fatal(err)
		}
	}
	return []string{"--config", filepath.Join(folder, "s.toml"), "--zone", "UTC", "--until", "2026-04-01", filepath.Join(folder, "h.csv")}
}

// arrivals is an invented history of falls that are looked at when they come: by
// a known rate with factors for the weekdays, and by a reference with a margin.
func arrivals(t *testing.T) []string {
	t.Helper()
	folder := t.TempDir()
	setup := "name = \"arrivals\"\nfolder = \"x\"\n[time]\nmode = \"history\"\n"
	for _, kind := range []struct{ name, limit, baseline string }{
		{"fall", "allowance = \"2 in 1y\"", "kind = \"known\"\nrate = 6\nstrata = { by = \"weekday\", factors = [1.2, 1.1, 1, 1, 1, 0.9, 0.8] }"},
		{"slip", "p_limit = 0.02", "kind = \"reference\"\nevents = 60\nexposure = 10000\nmargin = 1.1"},
	} {
		setup += fmt.Sprintf("[[indicator]]\nname = %q\nseries = [\"*/%s\"]\nunit = \"bed-days\"\nper = 1000\nevery = \"1d\"\nzone = \"UTC\"\n"+
			"events = \"each\"\nexposure = \"clock\"\nclock = { size = 20, per = \"1d\" }\nsince = \"2026-01-01\"\n"+
			"windows = [\"7d\", \"28d\"]\nlooks = [\"slot\", \"arrival\"]\n%s\nquiet = 3\n[indicator.baseline]\n%s\n",
			kind.name, kind.name, kind.limit, kind.baseline)
	}
	rows := ""
	for i := range 40 {
		at := time.Date(2026, 2, 10, 3+i*(i%7), 17*i%60, 0, 0, time.UTC).Add(time.Duration(i*i) * time.Hour)
		for _, name := range []string{"fall", "slip"} {
			rows += fmt.Sprintf("{\"series\":\"ward/%s\",\"at\":%q,\"events\":%d}\n", name, at.Format(time.RFC3339), 1+i%9/8)
		}
	}
	for name, text := range map[string]string{"s.toml": setup, "h.ndjson": rows} {
		if err := os.WriteFile(filepath.Join(folder, name), []byte(text), 0o600); err != nil {
			t.Fatal(err)
		}
	}
	return []string{"--config", filepath.Join(folder, "s.toml"), "--zone", "UTC", "--until", "2026-06-01", filepath.Join(folder, "h.ndjson")}
}

func recomputed(t *testing.T, e *life.Evidence) {
	t.Helper()
	args := strings.Fields(e.Recompute)[1:]
	code, out, stderr := run(t, append(args, "--json")...)
	var a recomputation
	if err := json.Unmarshal([]byte(out), &a); err != nil || code != 0 {
		t.Fatalf("%s: exit code %d, %v\n%s%s", e.Recompute, code, err, out, stderr)
	}
	// The sentences say what the command says, to their last digit.
	lo, hi := words.Pair(e.RateLower, e.RateUpper)
	if gotLo, gotHi := words.Pair(a.Lower, a.Upper); gotLo != lo || gotHi != hi || (a.P > 0 && words.PValue(math.Log10(a.P)) != words.P(e)) {
		t.Errorf("%s: the sentence has p = %s and %s to %s, the command p = %v and %s to %s", e.Recompute, words.P(e), lo, hi, a.P, gotLo, gotHi)
	}
	for _, pair := range []struct {
		name      string
		got, want float64
	}{
		{"p", a.P, e.P},
		{"rate_lower", a.Lower, e.RateLower},
		{"rate_upper", a.Upper, e.RateUpper},
		{"ratio_lower", a.RatioLow, e.RatioLower},
		{"attained_size", a.Size, e.AttainedSize},
		{"critical_count", float64(a.Critical), float64(e.Critical)},
	} {
		// Half an ulp in the mean moves p by about N/2 ulps.
		tolerance := 1e-15 * float64(2+e.Events)
		if math.Abs(pair.got-pair.want) > tolerance*math.Abs(pair.want) {
			t.Errorf("%s\n%s is %v, the record says %v", e.Recompute, pair.name, pair.got, pair.want)
		}
	}
}
