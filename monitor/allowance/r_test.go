package allowance

import (
	"fmt"
	"math"
	"os"
	"os/exec"
	"strconv"
	"strings"
	"testing"
)

// TestTrialsAgainstR holds crossings of the last n trials, of a known proportion
// and averaged over Beta(M+1, F-M), against R's dbinom and integrate. An average's
// grid ends where what is left can't matter: under 1e-13 a trial.
func TestTrialsAgainstR(t *testing.T) {
	if _, err := exec.LookPath("Rscript"); err != nil {
		if os.Getenv("TAILBELL_CI") == "1" {
			t.Fatalf("R is not installed (Debian: r-base-core): %v", err)
		}
		t.Skipf("R is not installed (Debian: r-base-core): %v", err)
	}
	const script = `
crossing <- function(theta, n, k) theta * (1 - theta) * dbinom(k - 1, n - 1, theta)
averaged <- function(M, F, n, k) integrate(function(x) {
  theta <- plogis(x); crossing(theta, n, k) * dbeta(theta, M + 1, F - M) * theta * (1 - theta)
}, -14, 4, rel.tol = 1e-11, subdivisions = 1000)$value
for (n in c(20, 200, 5000)) for (k in c(3, 7, 15)) cat(n, k, format(c(crossing(0.01, n, k), averaged(20, 2000, n, k)), digits = 15), "\n")
`
	out, err := exec.CommandContext(t.Context(), "Rscript", "-e", script).Output()
	if err != nil {
		t.Fatal(err)
	}
	compared := 0
	for line := range strings.Lines(string(out)) {
		var n, k int64
		var known, averaged string
		if _, err := fmt.Sscan(line, &n, &k, &known, &averaged); err != nil {
			t.Fatalf("%q: %v", line, err)
		}
		for _, test := range []struct {
			law  Law
			want string
			room float64
		}{{Law{Rate: 0.01}, known, 1e-11}, {Law{Estimated: true, Events: 20, Exposure: 2000}, averaged, 1e-8}} {
			x := trialsPart(t, trialPlan(test.law, n, [2]int64{}))
			want, err := strconv.ParseFloat(test.want, 64)
			if err != nil {
				t.Fatal(err)
			}
			if got := x.evenBatches(x.model, critical{k, true}).look; math.Abs(got-want) > test.room*want+1e-13 {
				t.Errorf("%d of the last %d, %+v: %v, R says %v", k, n, test.law, got, want)
			}
			compared++
		}
	}
	if compared != 18 {
		t.Errorf("%d figures compared, want 18", compared)
	}
}
