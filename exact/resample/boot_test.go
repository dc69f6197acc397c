package resample

import (
	"bufio"
	"math"
	"os"
	"os/exec"
	"sort"
	"strconv"
	"strings"
	"testing"
)

// coalYears reads the yearly counts 1851 to 1962.
func coalYears(t *testing.T) []float64 {
	t.Helper()
	text, err := os.ReadFile("../../testdata/baseline/coal-annual.csv")
	if err != nil {
		t.Fatal(err)
	}
	var years []float64
	for line := range strings.Lines(string(text)) {
		_, n, ok := strings.Cut(strings.TrimSpace(line), ",")
		if v, err := strconv.ParseFloat(n, 64); ok && err == nil {
			years = append(years, v)
		}
	}
	if len(years) != 112 {
		t.Fatalf("%d years, want 112", len(years))
	}
	return years
}

// fromR runs an R script and reads its lines "name value".
func fromR(t *testing.T, script string) map[string]float64 {
	t.Helper()
	missing := t.Skipf
	if os.Getenv("TAILBELL_CI") == "1" {
		missing = t.Fatalf
	}
	if _, err := exec.LookPath("Rscript"); err != nil {
		missing("R is not installed (Debian: r-base-core): %v", err)
	}
	if out, err := exec.CommandContext(t.Context(), "Rscript", "-e", "library(boot)").CombinedOutput(); err != nil {
		missing("R's boot package is not installed (Debian: r-cran-boot): %s", out)
	}
	out, err := exec.CommandContext(t.Context(), "Rscript", script).Output()
	if err != nil {
		t.Fatal(err)
	}
	values := map[string]float64{}
	lines := bufio.NewScanner(strings.NewReader(string(out)))
	for lines.Scan() {
		f := strings.Fields(lines.Text())
		v, err := strconv.ParseFloat(f[1], 64)
		if err != nil {
			t.Fatal(err)
		}
		values[f[0]] = v
	}
	return values
}

// TestAgainstR compares with R's boot package: an end of an interval that R
// finds must lie among our values where its rank is off by at most 4 standard
// errors of both simulations, and standard errors agree to 6 per cent.
func TestAgainstR(t *testing.T) {
	want := fromR(t, "../../testdata/baseline/boot.R")
	const draws, drawsOfR = 19_999, 4_999
	compare := func(name string, b *Redrawn, got float64) {
		t.Helper()
		w, ok := want[name]
		if !ok {
			t.Fatalf("R says nothing of %s", name)
		}
		p := float64(sort.SearchFloat64s(b.Values, got)) / draws
		off := 4 * math.Sqrt(p*(1-p)*(1./draws+1./drawsOfR))
		lower, upper := b.Quantile(p-off), b.Quantile(p+off)
		t.Logf("%-22s %10.4f  R %10.4f  to lie in %.4f to %.4f", name, got, w, lower, upper)
		if w < lower || w > upper {
			t.Errorf("%s is %.4f, R has %.4f, outside %.4f to %.4f", name, got, w, lower, upper)
		}
	}
	air, err := Bootstrap(t.Context(), Plan{Draws: draws, Seed: 1}, Blocks{Periods: 12, Length: 1}, meanOf(airconditioning))
	if err != nil {
		t.Fatal(err)
	}
	near(t, "air.error", air.Error(), want["air.error"], 0.06*want["air.error"])
	lower, upper := air.Percentile(0.05)
	compare("air.percentile.lower", air, lower)
	compare("air.percentile.upper", air, upper)
	j, err := Jackknife(Singles(12), meanOf(airconditioning))
	if err != nil {
		t.Fatal(err)
	}
	lower, upper, err = air.BCa(0.05, Acceleration(j.Influence()))
	if err != nil {
		t.Fatal(err)
	}
	compare("air.bca.lower", air, lower)
	compare("air.bca.upper", air, upper)

	years := coalYears(t)
	for _, c := range []struct {
		name string
		wrap bool
	}{{"coal.moving", false}, {"coal.wrapped", true}} {
		b, err := Bootstrap(t.Context(), Plan{Draws: draws, Seed: 2}, Blocks{Periods: 112, Length: 5, Wrap: c.wrap}, meanOf(years))
		if err != nil {
			t.Fatal(err)
		}
		near(t, c.name, b.Error(), want[c.name+".error"], 0.06*b.Error())
		lower, upper := b.Percentile(0.05)
		compare(c.name+".lower", b, lower)
		compare(c.name+".upper", b, upper)
	}
}
