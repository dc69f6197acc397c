package figure_test

import (
	"fmt"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"tailbell/alert/figure"
)

func wards() *figure.Funnel {
	f := &figure.Funnel{
		Title: "Falls, all wards", Events: "falls", Exposure: "bed-days", Rate: "per 1,000 bed-days", Per: 1000,
	}
	for i, n := range []int64{8, 14, 31, 22, 2, 40, 60, 0, 19} {
		f.Units = append(f.Units, figure.Unit{Name: fmt.Sprintf("ward <%d>", i+1), Events: n, Exposure: float64(800 * (i + 1))})
	}
	return f
}

func TestFunnel(t *testing.T) {
	got := wards().SVG()
	checkDrawn(t, got)
	path := filepath.Join("testdata", "funnel.svg")
	if *update {
		if err := os.WriteFile(path, []byte(got), 0o600); err != nil {
			t.Fatal(err)
		}
	}
	want, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	if got != string(want) || got != wards().SVG() {
		t.Error("the picture is another one: go test ./alert/figure -update")
	}
}

// checkDrawn fails where a picture holds what it must not.
func checkDrawn(t *testing.T, svg string) {
	t.Helper()
	for _, bad := range []string{"NaN", "Inf", "<ward", "style="} {
		if strings.Contains(svg, bad) {
			t.Errorf("the picture holds %q", bad)
		}
	}
}

// TestFunnelLimits compares with R 4.2.2: which counts of a unit lie past a
// limit, by ppois and pbinom. The pooled rate is 10 of 1,000.
//
//	x <- 0:60; min(x[ppois(x-1, 20, lower.tail=FALSE) <= 0.025])  # 30
//	min(x[ppois(x-1, 20, lower.tail=FALSE) <= 0.001])              # 36
//	max(x[ppois(x, 20) <= 0.025]); max(x[ppois(x, 20) <= 0.001])   # 11, 7
//	min(x[pbinom(x-1, 200, 0.1, lower.tail=FALSE) <= 0.025])       # 30
//	min(x[pbinom(x-1, 200, 0.1, lower.tail=FALSE) <= 0.001])       # 35
//	max(x[pbinom(x, 200, 0.1) <= 0.025]); max(x[pbinom(x, 200, 0.1) <= 0.001])  # 11, 7
func TestFunnelLimits(t *testing.T) {
	for _, c := range []struct {
		proportion                     bool
		rate, exposure                 float64
		inner, outer, innerLo, outerLo int64
	}{{false, 0.01, 2000, 30, 36, 11, 7}, {true, 0.1, 200, 30, 35, 11, 7}} {
		outside := func(n int64) int {
			f := figure.Funnel{Per: 1, Proportion: c.proportion, Target: c.rate, Units: []figure.Unit{{Events: n, Exposure: c.exposure}}}
			return f.Rows()[0].Outside
		}
		for n, want := range map[int64]int{
			c.inner: 1, c.inner - 1: 0, c.outer: 2, c.outer - 1: 1, c.innerLo: 1, c.innerLo + 1: 0, c.outerLo: 2, c.outerLo + 1: 1,
		} {
			if got := outside(n); got != want {
				t.Errorf("proportion %t: %d events lie %d limits out, not %d", c.proportion, n, got, want)
			}
		}
	}
}

func TestFunnelOfLittle(t *testing.T) {
	for _, f := range []figure.Funnel{
		{Per: 1},
		{Per: 1, Units: []figure.Unit{{Name: "a"}}},
		{Per: 1, Units: []figure.Unit{{Name: "a", Exposure: 3}}},
		{Per: 1, Proportion: true, Units: []figure.Unit{{Name: "a", Events: 3, Exposure: 3}}},
	} {
		checkDrawn(t, f.SVG())
		for _, r := range f.Rows() {
			if r.Exposure > 0 && (math.IsNaN(r.P) || r.Outside != 0) {
				t.Errorf("%+v", r)
			}
		}
	}
}
