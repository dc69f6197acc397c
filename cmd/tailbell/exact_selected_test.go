package main

import (
	"bytes"
	"encoding/csv"
	"encoding/json"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"

	"tailbell/exact"
)

// someUnits is a table of units of which every fourth has more than usual.
func someUnits(r *rand.Rand, units int) string {
	var b strings.Builder
	b.WriteString("events,exposure,baseline\n")
	for i := range units {
		exposure, mean := 100+r.IntN(900), 0.01
		if i%4 == 0 {
			mean *= 1 + 2*r.Float64()
		}
		events := 0
		for p := r.ExpFloat64(); p < mean*float64(exposure); p += r.ExpFloat64() {
			events++
		}
		fmt.Fprintf(&b, "%d,%d,0.01\n", events, exposure)
	}
	return b.String()
}

// byColumn reads a table into its columns.
func byColumn(t *testing.T, text string) map[string][]string {
	t.Helper()
	rows, err := csv.NewReader(strings.NewReader(text)).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	cols := map[string][]string{}
	for i, name := range rows[0] {
		for _, r := range rows[1:] {
			cols[name] = append(cols[name], r[i])
		}
	}
	return cols
}

// TestExactSelectedAgainstR compares what follows from a whole table with R's
// p.adjust and poisson.test.
func TestExactSelectedAgainstR(t *testing.T) {
	rscript, err := exec.LookPath("Rscript")
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
	table := someUnits(rand.New(rand.NewPCG(seed, 2)), 300)
	cmd := exec.CommandContext(t.Context(), rscript, "--vanilla", filepath.Join("..", "..", "testdata", "exact", "select.R"))
	cmd.Stdin = strings.NewReader(table)
	var errs bytes.Buffer
	cmd.Stderr = &errs
	raw, err := cmd.Output()
	if err != nil {
		t.Fatalf("Rscript: %v\n%s", err, errs.String())
	}
	out, msg, code := runExact(t, table, "-")
	if code != 0 {
		t.Fatalf("exit %d, %s", code, msg)
	}
	ours, theirs := byColumn(t, out), byColumn(t, string(raw))
	compared := 0
	for name, column := range theirs {
		for i, want := range column {
			got := ours[name][i]
			if want == "" || got == "" {
				if want != got {
					t.Errorf("seed %d, row %d: %s is %q, R says %q", seed, i+1, name, got, want)
				}
				continue
			}
			g, err1 := strconv.ParseFloat(got, 64)
			w, err2 := strconv.ParseFloat(want, 64)
			if err1 != nil || err2 != nil || math.Abs(g-w) > 1e-10*w {
				t.Errorf("seed %d, row %d: %s is %s, R says %s", seed, i+1, name, got, want)
			}
			compared++
		}
	}
	if compared < 4*300+3*10 {
		t.Errorf("seed %d: only %d values were compared", seed, compared)
	}
}

// TestExactSelectedByDefinition makes the bounds of a table's selected rows again
// as answers to one question each, at the alpha that the table names.
func TestExactSelectedByDefinition(t *testing.T) {
	const seed, units, alpha = 9, 60, 0.1
	table := someUnits(rand.New(rand.NewPCG(seed, 3)), units)
	for _, more := range [][]string{nil, {"--mid-p"}, {"--two-sided", "blaker"}, {"--tail", "lower", "--alpha", "0.9"}} {
		level := []string{"--alpha", fmt.Sprint(alpha), "--per", "1000"}
		per := strings.ReplaceAll(table, ",0.01\n", ",10\n")
		out, msg, code := runExact(t, per, append(append([]string{"-"}, level...), more...)...)
		if code != 0 {
			t.Fatalf("%v: exit %d, %s", more, code, msg)
		}
		c := byColumn(t, out)
		selected := 0
		for _, v := range c["fcr_alpha"] {
			if v != "" {
				selected++
			}
		}
		if selected == 0 || selected == units {
			t.Errorf("%v: %d of %d rows are selected, which tests little", more, selected, units)
		}
		limit := alpha
		if slices.Contains(more, "--alpha") {
			limit = 0.9
		}
		for i := range units {
			bh, err := strconv.ParseFloat(c["bh_p"][i], 64)
			if err != nil {
				t.Fatal(err)
			}
			if exact.AtMost(bh, limit) != (c["fcr_alpha"][i] != "") {
				t.Errorf("%v, row %d: bh_p is %v, fcr_alpha %q", more, i+1, bh, c["fcr_alpha"][i])
			}
			if c["fcr_alpha"][i] == "" {
				continue
			}
			if a, err := strconv.ParseFloat(c["fcr_alpha"][i], 64); err != nil || math.Abs(a-limit*float64(selected)/units) > 1e-15 {
				t.Errorf("%v, row %d: fcr_alpha is %s with %d selected", more, i+1, c["fcr_alpha"][i], selected)
			}
			ask := append([]string{
				"--events", c["events"][i], "--exposure", c["exposure"][i], "--baseline", "10", "--per", "1000", "--json",
			}, more...)
			if j := slices.Index(ask, "--alpha"); j >= 0 {
				ask = slices.Delete(ask, j, j+2)
			}
			one, msg, code := runExact(t, "", append(ask, "--alpha", c["fcr_alpha"][i])...)
			var r exactRecord
			if err := json.Unmarshal([]byte(one), &r); err != nil || code != 0 {
				t.Fatalf("%v: %v, %s", more, err, msg)
			}
			want := []string{cell(*r.RateLower), cell(*r.RateUpper), cell(*r.RatioLower), cell(*r.RatioUpper)}
			got := []string{c["fcr_rate_lower"][i], c["fcr_rate_upper"][i], c["fcr_ratio_lower"][i], c["fcr_ratio_upper"][i]}
			if !slices.Equal(want, got) {
				t.Errorf("%v, row %d: bounds %v, want %v", more, i+1, got, want)
			}
		}
	}
}

// TestExactSelectedJSON holds that only selected rows carry such bounds, and that
// one without an upper bound says null.
func TestExactSelectedJSON(t *testing.T) {
	table := "events,exposure,reference_events,reference_exposure\n8,3,0,5\n1,3,1,5\n0,3,2,5\n"
	out, errs, code := runExact(t, table, "-", "--json")
	lines := strings.Split(strings.TrimSpace(out), "\n")
	if code != 0 || len(lines) != 3 {
		t.Fatalf("exit %d, %s\n%s", code, errs, out)
	}
	var first struct {
		Alpha      *float64 `json:"fcr_alpha"`
		RatioLower *float64 `json:"fcr_ratio_lower"`
		RatioUpper *float64 `json:"fcr_ratio_upper"`
	}
	if err := json.Unmarshal([]byte(lines[0]), &first); err != nil {
		t.Fatal(err)
	}
	if first.Alpha == nil || math.Abs(*first.Alpha-0.05/3) > 1e-15 || first.RatioLower == nil || first.RatioUpper != nil || !strings.Contains(lines[0], `"fcr_ratio_upper":null`) {
		t.Errorf("got %s", lines[0])
	}
	for _, l := range lines[1:] {
		if strings.Contains(l, "fcr_") || !json.Valid([]byte(l)) {
			t.Errorf("got %s", l)
		}
	}
}
