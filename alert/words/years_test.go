package words

import (
	"math"
	"strings"
	"testing"

	"tailbell/monitor/life"
)

// TestYears says what a ring under an allowance means.
func TestYears(t *testing.T) {
	var b strings.Builder
	for _, x := range []struct {
		kind string
		life.Allowance
	}{
		{"known", life.Allowance{Text: "1 in 9y", For: "series", Here: 0.1112, Series: 14, All: 1.5568}},
		{"known", life.Allowance{Text: "2 in 1y", For: "indicator", Here: 0.0171, Series: 1, All: 0.0171}},
		{"reference", life.Allowance{Text: "1 in 1y", For: "series", Here: 0.98, Series: 1204, All: 1179.9}},
		{"trailing", life.Allowance{Text: "1 in 5y", For: "series", Assurance: 0.9, Here: 0.0312}},
	} {
		r := ward(t)
		r.Opening.Baseline = life.Baseline{Kind: x.kind, Events: 36, Exposure: "20000"}
		r.Opening.Allowance, r.Opening.Limit = &x.Allowance, 0.00012345
		b.WriteString(wrap(basis(&r, &r.Opening)+" "+numbers(&r.Opening), 100, "", "") + "\n")
	}
	golden(t, "years.txt", b.String())
}

func TestOften(t *testing.T) {
	for perYear, want := range map[float64]string{
		1e-9: "once in more than a million years", 1.0 / 1234: "once in 1,200 years", 1.0 / 9.96: "once in 10 years",
		1.0 / 9.94: "once in 9.9 years", 1 / 1.06: "once in 1.1 years", 1 / 1.04: "once a year", 1: "once a year", 1.04: "once a year",
		1.06: "1.1 times a year", 365.2425: "365.2 times a year", math.Pi * 1e4: "31,416 times a year",
	} {
		if got := often(perYear); got != want {
			t.Errorf("%v a year: %q, want %q", perYear, got, want)
		}
	}
}
