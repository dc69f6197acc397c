package main

import (
	"bytes"
	"context"
	"encoding/csv"
	"encoding/json"
	"flag"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"strconv"
	"strings"
	"testing"

	"tailbell/exact"
)

var exactSeed = flag.Uint64("exact-seed", 0, "seed of the random comparison with R (0: a new one, printed)")

func runExact(t *testing.T, stdin string, args ...string) (stdout, stderr string, code int) {
	t.Helper()
	var out, errs bytes.Buffer
	code = execute(context.Background(), append([]string{"exact"}, args...), strings.NewReader(stdin), &out, &errs)
	return out.String(), errs.String(), code
}

func TestExactOneQuestion(t *testing.T) {
	for _, c := range []struct {
		args string
		want []string
	}{
		{"--events 4 --exposure 616 --baseline 1.8 --per 1000", []string{
			"4 events in 616 of exposure, where 1.109 would be expected at the baseline of 1.8 per 1000.",
			"6.494 per 1000, 95 % bounds 1.769 to 16.63 (Garwood)", "ratio to the baseline      3.608",
			"p, this many or more       0.0264", "At p <= 0.001 a look signals from 7 events on (attained size 0.0001562).",
		}},
		{"--events 0 --exposure 10 --baseline 1 --tail lower --limit 0.01", []string{
			"p, this few or fewer       4.540e-05", "bounds 0 to 0.3689", "a look signals at 3 events or fewer (attained size 0.01034)",
		}[:2]},
		{"--events 11 --exposure 800 --reference-events 21 --reference-exposure 3011", []string{
			"rate ratio                 1.971, 95 % bounds 0.8584 to 4.277", "0.05601", "as in the reference, 21 events in 3011 of exposure",
		}},
		// What the reference's rate brings, 21 * 800 / 3011, whatever was seen.
		{"--events 11 --exposure 800 --reference-events 21 --reference-exposure 3011", []string{"where 5.58 would be expected if"}},
		{"--events 40 --exposure 800 --reference-events 21 --reference-exposure 3011", []string{"where 5.58 would be expected if"}},
		{"--events 1 --exposure 800 --reference-events 21 --reference-exposure 3011 --margin 2 --tail lower", []string{
			"where 2.79 would be expected if", "(divided by 2, the margin)",
		}},
		// Odds of 20 in 80, halved: 20 in 160, so 1 in 9 of 90 trials.
		{"--events 1 --trials 90 --reference-events 20 --reference-trials 100 --margin 2 --tail lower", []string{
			"where 10 would be expected if", "(its odds divided by 2, the margin)",
		}},
		{"--events 30 --trials 90 --reference-events 20 --reference-trials 100 --margin 2", []string{
			"where 30 would be expected if", "(its odds times 2, the margin)",
		}},
		{"--events 3 --trials 4 --reference-events 1 --reference-trials 4", []string{"odds ratio                 9,", "0.2429", "Fisher's test"}},
		{"--events 682 --trials 925 --baseline 0.75 --two-sided minlike", []string{"two-sided (minlike)     0.3825", "minimum likelihood"}},
		{"--events 3 --trials 15 --baseline 0.1 --mid-p", []string{"mid-p"}},
		{"--events 5000 --exposure 1 --baseline 1", []string{"10^-16326.06"}},
		{"--events 0 --exposure 0.001 --baseline 1 --tail lower", []string{"No count could signal at p <= 0.001 here"}},
		{"--events 1 --exposure 5", []string{"1 event in 5 of exposure.", "bounds 0.005064 to 1.114"}},
		{"--events 100 --exposure 1 --level 0.999999999", []string{"99.9999999 %"}},
	} {
		out, errs, code := runExact(t, "", strings.Fields(c.args)...)
		if code != 0 {
			t.Errorf("%s: exit %d, %s", c.args, code, errs)
		}
		for _, w := range c.want {
			if !strings.Contains(out, w) {
				t.Errorf("%s: %q is missing from\n%s", c.args, w, out)
			}
		}
	}
}

func TestExactJSON(t *testing.T) {
	out, errs, code := runExact(t, "", "--events", "7", "--exposure", "3", "--baseline", "0.5", "--json", "--limit", "0.01")
	if code != 0 {
		t.Fatal(code, errs)
	}
	var r exactRecord
	if err := json.Unmarshal([]byte(out), &r); err != nil {
		t.Fatal(err)
	}
	x := exact.Poisson{Rate: 0.5, Exposure: 3}
	k, size, _ := x.CriticalUpper(0.01)
	l, u := x.RateBounds(7, 0.05)
	if *r.P != x.Upper(7) || *r.Log10P != x.LogUpper(7)/math.Ln10 || *r.CriticalCount != k || *r.AttainedSize != size || *r.RateLower != l || *r.RateUpper != u {
		t.Errorf("got %s", out)
	}
	// no reference events: the ratio has no upper bound, and JSON has no infinity
	out, _, _ = runExact(t, "", "--events", "2", "--exposure", "3", "--reference-events", "0", "--reference-exposure", "5", "--json")
	if !strings.Contains(out, `"ratio":null`) || !strings.Contains(out, `"ratio_upper":null`) {
		t.Errorf("got %s", out)
	}
}

func TestExactRefuses(t *testing.T) {
	for args, want := range map[string]string{
		"":                             "events are missing",
		"--events 3":                   "exposure (or trials) is missing",
		"--events -1 --exposure 2":     "whole number from 0",
		"--events 3 --trials 2":        "more events than trials",
		"--events 3 --exposure 0":      "above 0",
		"--events 3 --exposure 1e-320": "from 1e-100 to 1e100",
		"--events 3 --exposure 1e300":  "from 1e-100 to 1e100",
		"--events 3 --exposure 2 --baseline 1e-200":                                "from 1e-100 to 1e100",
		"--events 3 --exposure 2 --baseline 1 --margin 1e200":                      "up to 1e100",
		"--events 3 --exposure 2 --reference-events 1 --reference-exposure 1e-310": "from 1e-100 to 1e100",
		"--events 3 --exposure 2 --baseline -1":                                    "baseline is -1",
		"--events 3 --exposure 2 --reference-events 1":                             "needs both",
		"--events 3 --exposure 2 --reference-events 1 --reference-trials 4":        "give both the same",
		"--events 3 --trials 9 --baseline 2":                                       "at most 1",
		"--events 3 --exposure 2 --baseline 1 --tail up":                           "upper or lower",
		"--events 3 --exposure 2 --baseline 1 --two-sided x":                       "central, minlike or blaker",
		"--events 3 --exposure 2 --baseline 1 --two-sided blaker --mid-p":          "--mid-p goes with",
		"--events 3 --exposure 2 --baseline 1 --level 95":                          "between 0 and 1",
		"--events 3 --exposure 2 --baseline 1 --alpha 0":                           "--alpha is 0",
		"--events 3 --exposure 2 --baseline 1 --limit 2":                           "--limit is 2",
		"--events 3 --exposure 2 --baseline 1 --per 0":                             "--per is 0",
		"--events 3 --exposure 2 --baseline 1 --margin 0":                          "margin is 0",
	} {
		_, errs, code := runExact(t, "", strings.Fields(args)...)
		if code != 2 || !strings.Contains(errs, want) {
			t.Errorf("%q: exit %d, %q", args, code, errs)
		}
	}
}

func TestExactRefusesTwoMeasures(t *testing.T) {
	if _, errs, code := runExact(t, "", strings.Fields("--events 3 --exposure 2 --trials 2")...); code != 2 || !strings.Contains(errs, "give only one of --exposure, --trials") {
		t.Errorf("exit %d, %s", code, errs)
	}
}

func TestExactTable(t *testing.T) {
	table := "unit,events,exposure\n# a note\nward-1,4,616\nward-2,x,700\nward-3,0,150.5\nward-4,1\n\"ward\"-5,1,2\nward-6,9,800\n"
	out, errs, code := runExact(t, table, "-", "--baseline", "1.8", "--per", "1000")
	if code != 1 {
		t.Errorf("exit %d", code)
	}
	for _, w := range []string{
		`-: line 4: events is "x": give a whole number`, "-: line 6: 2 fields under 3 columns", "-: line 7: not readable as CSV", "3 of 6 rows could not be answered",
	} {
		if !strings.Contains(errs, w) {
			t.Errorf("%q is missing from\n%s", w, errs)
		}
	}
	rows, err := csv.NewReader(strings.NewReader(out)).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	if len(rows) != 7 || strings.Join(rows[0], ",") != "unit,events,exposure,"+strings.Join(addedColumns, ",") {
		t.Fatalf("got %v", rows)
	}
	x := exact.Poisson{Rate: 1.8 / 1000, Exposure: 616}
	if got := rows[1][3]; got != strconv.FormatFloat(x.Upper(4), 'g', -1, 64) {
		t.Errorf("p of ward-1: %s", got)
	}
	var p []float64
	for _, i := range []int{1, 3, 6} {
		v, err := strconv.ParseFloat(rows[i][3], 64)
		if err != nil {
			t.Fatal(err)
		}
		p = append(p, v)
	}
	holm := exact.Holm(nil, p)
	if rows[6][13] != strconv.FormatFloat(holm[2], 'g', -1, 64) {
		t.Errorf("Holm of ward-6: %s, want %v", rows[6][13], holm[2])
	}
	if !strings.Contains(rows[2][len(rows[2])-1], "whole number") {
		t.Errorf("the bad row does not carry its problem: %v", rows[2])
	}

	path := filepath.Join(t.TempDir(), "mixed.csv")
	body := "Events,Trials,Reference_Events,Reference_Trials,site\n3,4,1,4,a\n2,30,1,300,b\n"
	if err := os.WriteFile(path, []byte(body), 0o600); err != nil {
		t.Fatal(err)
	}
	out, errs, code = runExact(t, "", path, "--json")
	if code != 0 || strings.Count(out, "\n") != 2 || !strings.Contains(out, `"ratio_kind":"odds ratio"`) || !strings.Contains(out, `"holm_p"`) {
		t.Errorf("exit %d, %s\n%s", code, errs, out)
	}
	for table, want := range map[string]string{
		"":                         "the table is empty",
		"a,b\n1,2\n":               "needs a column events",
		"events\n1\n":              "needs a column exposure or trials",
		"events,events\n":          "twice",
		"events,exposure,p\n":      "rename it",
		"events,exposure,trials\n": "exposure and trials",
	} {
		if _, errs, code := runExact(t, table, "-"); code != 1 || !strings.Contains(errs, want) {
			t.Errorf("%q: exit %d, %s", table, code, errs)
		}
	}
	if _, _, code := runExact(t, "", filepath.Join(t.TempDir(), "absent.csv")); code != 1 {
		t.Errorf("absent file: exit %d", code)
	}
}

// A table of many rows is answered whole; a million take some seconds.
func TestExactLongTable(t *testing.T) {
	var b strings.Builder
	b.WriteString("unit,events,exposure,baseline\n")
	const rows = 20000
	r := rand.New(rand.NewPCG(3, 4))
	for i := range rows {
		fmt.Fprintf(&b, "u%d,%d,%d,0.01\n", i, r.IntN(9), 100+r.IntN(900))
	}
	out, errs, code := runExact(t, b.String(), "-")
	if code != 0 || strings.Count(out, "\n") != rows+1 {
		t.Fatalf("exit %d, %d lines, %s", code, strings.Count(out, "\n"), errs)
	}
}

func FuzzExactTable(f *testing.F) {
	f.Add("unit,events,exposure,baseline\na,4,616,0.0018\nb,x,1,2\n")
	f.Add("events,trials,reference_events,reference_trials,margin\n3,4,1,4,1\n1,2\n\"\n")
	f.Add("\ufeffevents,exposure\n1e3,0x1p4\n9223372036854775807,1e308\n")
	f.Fuzz(func(t *testing.T, table string) {
		o := exactOptions{per: 1, alpha: 0.05, limit: 0.001}
		out := newExactTable(o, len(table)%2 == 0)
		header, err := readTable(strings.NewReader(table), question{margin: 1}, o, func(header []string, r readRow) error {
			if a := r.answer; r.err == nil && (a.hasTest && !(a.p >= 0 && a.p <= 1) || a.rateLower > a.rate || a.rateUpper < a.rate) {
				t.Errorf("row %v: %+v", r.fields, a)
			}
			if r.line < 1 {
				t.Errorf("row %v has line %d", r.fields, r.line)
			}
			return out.add(header, r)
		})
		if err != nil {
			return
		}
		var text bytes.Buffer
		if err := out.print(&text, header); err != nil {
			t.Error(err)
		}
		if out.json {
			for line := range strings.Lines(text.String()) {
				if !json.Valid([]byte(line)) {
					t.Errorf("not JSON: %s", line)
				}
			}
		} else if _, err := csv.NewReader(&text).ReadAll(); err != nil {
			t.Errorf("not CSV: %v", err)
		}
	})
}

// rCase is one random question in the form that compare.R reads.
type rCase struct {
	kind                      int // 1 known rate, 2 known proportion, 3 two rates, 4 two proportions
	lower                     bool
	events, refEvents         int64
	size, reference, baseline float64
}

func randomCase(r *rand.Rand) rCase {
	c := rCase{kind: 1 + r.IntN(4), lower: r.IntN(2) == 0}
	mu := math.Exp(r.Float64()*9 - 2)
	near := func(m float64) int64 { return int64(max(0, m+math.Sqrt(m+1)*(r.NormFloat64()*2.5))) }
	switch c.events = near(mu); c.kind {
	case 1:
		c.size = math.Round(1+r.Float64()*1e5) / 8
		c.baseline = mu / c.size
	case 2:
		c.size = math.Round(mu*(1+math.Exp(r.Float64()*8))) + 1
		c.baseline = mu / c.size
		c.events = min(c.events, int64(c.size))
	case 3:
		c.size, c.reference = math.Round(1+r.Float64()*1e5)/8, math.Round(1+r.Float64()*1e5)/8
		c.refEvents = near(mu * c.reference / c.size)
	case 4:
		c.size, c.reference = math.Round(mu*(1+math.Exp(r.Float64()*6)))+1, math.Round(mu*(1+math.Exp(r.Float64()*6)))+1
		c.refEvents = min(near(mu*c.reference/c.size), int64(c.reference))
		c.events = min(c.events, int64(c.size))
	}
	return c
}

// The same few thousand random questions through tailbell exact and through R's ppois, pbinom,
// phyper, qgamma and qbeta.
func TestExactAgainstR(t *testing.T) {
	r, err := exec.LookPath("Rscript")
	if err != nil {
		if os.Getenv("TAILBELL_CI") == "1" {
			t.Fatal("Rscript is missing: install r-base-core")
		}
		t.Skip("Rscript is missing: install r-base-core to compare with R")
	}
	seed := *exactSeed
	if seed == 0 {
		seed = rand.Uint64()
	}
	t.Logf("seed %d (rerun with -exact-seed %d)", seed, seed)
	rng := rand.New(rand.NewPCG(seed, 1))
	cases := make([]rCase, 4000)
	var in strings.Builder
	in.WriteString("kind,tail,events,size,reference_events,reference,baseline\n")
	tables := map[string]*strings.Builder{}
	index := map[string][]int{}
	for i := range cases {
		c := randomCase(rng)
		cases[i] = c
		tail := 0
		if c.lower {
			tail = 1
		}
		num := func(v float64) string { return strconv.FormatFloat(v, 'g', -1, 64) }
		fmt.Fprintf(&in, "%d,%d,%d,%s,%d,%s,%s\n", c.kind, tail, c.events, num(c.size), c.refEvents, num(c.reference), num(c.baseline))
		key := fmt.Sprint(c.kind, " ", tail)
		head := [...]string{"events,exposure,baseline", "events,trials,baseline", "events,exposure,reference_events,reference_exposure", "events,trials,reference_events,reference_trials"}[c.kind-1]
		if tables[key] == nil {
			tables[key] = &strings.Builder{}
			tables[key].WriteString(head + "\n")
		}
		if c.kind <= 2 {
			fmt.Fprintf(tables[key], "%d,%s,%s\n", c.events, num(c.size), num(c.baseline))
		} else {
			fmt.Fprintf(tables[key], "%d,%s,%d,%s\n", c.events, num(c.size), c.refEvents, num(c.reference))
		}
		index[key] = append(index[key], i)
	}
	cmd := exec.CommandContext(t.Context(), r, "--vanilla", filepath.Join("..", "..", "testdata", "exact", "compare.R"))
	cmd.Stdin = strings.NewReader(in.String())
	var errs bytes.Buffer
	cmd.Stderr = &errs
	raw, err := cmd.Output()
	if err != nil {
		t.Fatalf("Rscript: %v\n%s", err, errs.String())
	}
	theirs, err := csv.NewReader(bytes.NewReader(raw)).ReadAll()
	if err != nil || len(theirs) != len(cases)+1 {
		t.Fatalf("R answered %d rows, %v", len(theirs)-1, err)
	}
	worst := map[string]float64{}
	for key, table := range tables {
		tail := "upper"
		if strings.HasSuffix(key, "1") {
			tail = "lower"
		}
		out, msg, code := runExact(t, table.String(), "-", "--tail", tail)
		if code != 0 {
			t.Fatalf("%s: exit %d, %s", key, code, msg)
		}
		rows, err := csv.NewReader(strings.NewReader(out)).ReadAll()
		if err != nil {
			t.Fatal(err)
		}
		col := map[string]int{}
		for i, h := range rows[0] {
			col[h] = i
		}
		for j, i := range index[key] {
			for what, at := range map[string]int{"p": 0, "rate_lower": 1, "rate_upper": 2} {
				ours, err1 := strconv.ParseFloat(rows[j+1][col[what]], 64)
				their, err2 := strconv.ParseFloat(theirs[i+1][at], 64)
				if err1 != nil || err2 != nil {
					t.Fatalf("%+v: %s is %v in ours, %v in R's", cases[i], what, rows[j+1], theirs[i+1])
				}
				diff := math.Abs(ours - their)
				if their != 0 {
					diff /= their
				}
				worst[what] = math.Max(worst[what], diff)
				if !(diff <= 1e-10) {
					t.Errorf("%+v: %s is %v, R says %v", cases[i], what, ours, their)
				}
			}
		}
	}
	t.Logf("%d cases; largest relative differences %v", len(cases), worst)
}
