package estimate

import (
	"os"
	"os/exec"
	"strings"
	"testing"

	"tailbell/exact"
	"tailbell/exact/resample"
)

// TestAgainstR compares conditional p-values with those that R simulates.
func TestAgainstR(t *testing.T) {
	if _, err := exec.LookPath("Rscript"); err != nil {
		if os.Getenv("TAILBELL_CI") == "1" {
			t.Fatalf("R is not installed (Debian: r-base-core): %v", err)
		}
		t.Skipf("R is not installed (Debian: r-base-core): %v", err)
	}
	out, err := exec.CommandContext(t.Context(), "Rscript", testdata+"dispersion.R", testdata+"frequencies.csv").Output()
	if err != nil {
		t.Fatal(err)
	}
	compared := 0
	for line := range strings.Lines(string(out)) {
		f := strings.Fields(line)
		s := seriesOf(f[0], frequencies(t, f[0]), one)
		p, err := spreadTable(false, []Series{s}, 1).test(t.Context(), resample.Plan{Draws: 20_000, Seed: 1})
		if err != nil {
			t.Fatal(err)
		}
		lower, upper := exact.ClopperPearson(number(t, f[1]), number(t, f[2]), 1e-4)
		t.Logf("%-26s %.6g (exact: %v), R %.6g to %.6g", f[0], p.P, p.Exact, lower, upper)
		if p.Upper < lower || p.Lower > upper {
			t.Errorf("%s: p is %g to %g, R's simulation gives %g to %g", f[0], p.Lower, p.Upper, lower, upper)
		}
		compared++
	}
	if compared != 2 {
		t.Errorf("%d data sets compared, want 2", compared)
	}
}
