package resample

import (
	"bufio"
	"math"
	"os"
	"os/exec"
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

// TestAgainstR compares with R's boot package within the Monte Carlo error of
// both: quantiles to 4 sqrt(2) of their own, standard errors to 4 per cent.
func TestAgainstR(t *testing.T) {
	want := fromR(t, "../../testdata/baseline/boot.R")
	const draws = 19_999
	compare := func(name string, got, stderr, p float64) {
		t.Helper()
		w, ok := want[name]
		if !ok {
			t.Fatalf("R says nothing of %s", name)
		}
		// The standard error of a quantile is sqrt(p(1-p)/n)/density; the
		// density is the normal one, halved for the skewness.
		density := math.Exp(-quantile(p)*quantile(p)/2) / math.Sqrt(2*math.Pi) / stderr / 2
		tolerance := 4 * math.Sqrt(2*p*(1-p)/draws) / density
		t.Logf("%-22s %10.4f  R %10.4f  tolerance %.3f", name, got, w, tolerance)
		near(t, name, got, w, tolerance)
	}
	air, err := Bootstrap(t.Context(), Plan{Draws: draws, Seed: 1}, Blocks{Periods: 12, Length: 1}, meanOf(airconditioning))
	if err != nil {
		t.Fatal(err)
	}
	near(t, "air.error", air.Error(), want["air.error"], 0.04*want["air.error"])
	lower, upper := air.Percentile(0.05)
	compare("air.percentile.lower", lower, air.Error(), 0.025)
	compare("air.percentile.upper", upper, air.Error(), 0.975)
	j, err := Jackknife(Singles(12), meanOf(airconditioning))
	if err != nil {
		t.Fatal(err)
	}
	lower, upper, err = air.BCa(0.05, Acceleration(j.Influence()))
	if err != nil {
		t.Fatal(err)
	}
	compare("air.bca.lower", lower, air.Error(), 0.05)
	compare("air.bca.upper", upper, air.Error(), 0.99)

	years := coalYears(t)
	for _, c := range []struct {
		name string
		wrap bool
	}{{"coal.moving", false}, {"coal.wrapped", true}} {
		b, err := Bootstrap(t.Context(), Plan{Draws: draws, Seed: 2}, Blocks{Periods: 112, Length: 5, Wrap: c.wrap}, meanOf(years))
		if err != nil {
			t.Fatal(err)
		}
		near(t, c.name, b.Error(), want[c.name+".error"], 0.04*b.Error())
		lower, upper := b.Percentile(0.05)
		compare(c.name+".lower", lower, b.Error(), 0.025)
		compare(c.name+".upper", upper, b.Error(), 0.975)
	}
}
