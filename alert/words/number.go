package words

import (
	"math"
	"strconv"
	"strings"

	"tailbell/monitor/life"
)

// whole writes a count in groups of three.
func whole(n int64) string { return grouped(strconv.FormatInt(n, 10)) }

// Whole writes a count in groups of three digits.
func Whole(n int64) string { return whole(n) }

// Amount writes a number of things by their plural noun: "1 row", "1,204 rows",
// "0 rows".
func Amount(n int64, nouns string) string {
	if n == 1 {
		nouns = singular(nouns)
	}
	return whole(n) + " " + nouns
}

// P writes the p of a look as the sentences do.
func P(e *life.Evidence) string { return pvalue(log10p(e)) }

// Opened writes when an alert was opened, in its zone, for a list. Of one that
// late data opened that is after its look was due.
func Opened(r *life.Record) string {
	at := r.OpenedAt().In(zoneOf(r))
	return at.Format("2006-01-02 ") + clock(at)
}

// Expected writes the expected number of events of a look as the sentences do.
func Expected(e *life.Evidence) string { return expected(e) }

// grouped puts commas between groups of three digits of the whole part of a
// plain decimal number.
func grouped(s string) string {
	sign := ""
	if strings.HasPrefix(s, "-") {
		sign, s = "-", s[1:]
	}
	head, frac, point := strings.Cut(s, ".")
	for _, c := range []byte(head) {
		if c < '0' || c > '9' {
			return sign + s
		}
	}
	var b strings.Builder
	for i := range len(head) {
		if i > 0 && (len(head)-i)%3 == 0 {
			b.WriteByte(',')
		}
		b.WriteByte(head[i])
	}
	if point {
		b.WriteString("." + frac)
	}
	return sign + b.String()
}

// number writes an expected number or a rate: no decimal from 1,000, one from
// 1, two significant digits below.
func number(x float64) string { return fixed(x, decimals(x)) }

// decimals is how many decimals number gives x.
func decimals(x float64) int {
	switch x = math.Abs(x); {
	case x == 0 || x >= 999.95:
		return 0
	case x >= 0.995:
		return 1
	}
	return decimalsFor(x)
}

// decimalsFor is how many decimals x needs for two significant digits.
func decimalsFor(x float64) int {
	if x = math.Abs(x); x == 0 || math.IsInf(x, 0) || math.IsNaN(x) {
		return 0
	}
	return min(max(1-int(math.Floor(math.Log10(roundTo(x, 2)))), 0), 12)
}

func fixed(x float64, places int) string {
	if x == 0 {
		return "0"
	}
	if a := math.Abs(x); a < 1e-6 {
		return scientific(math.Log10(a))
	}
	return grouped(strconv.FormatFloat(x, 'f', places, 64))
}

// pair writes two bounds, with decimals enough to tell them apart by two
// significant digits of their difference.
func pair(lo, hi float64) (lower, upper string) {
	d := decimalsFor(hi - lo)
	return fixed(lo, max(decimals(lo), d)), fixed(hi, max(decimals(hi), d))
}

// pvalue writes p = 10^log10p with two significant digits.
func pvalue(log10p float64) string {
	p := math.Pow(10, log10p)
	if p >= 0.995 {
		return "1"
	}
	if p < 0.0001 {
		return scientific(log10p)
	}
	p = roundTo(p, 2)
	return strconv.FormatFloat(p, 'f', decimalsFor(p), 64)
}

// scientific writes 10^log10x as 2.3e-9. It works on the logarithm, so that
// numbers far below the smallest float are written too.
func scientific(log10x float64) string {
	if math.IsInf(log10x, -1) {
		return "0"
	}
	exp := math.Floor(log10x)
	mantissa := math.Round(math.Pow(10, log10x-exp)*10) / 10
	if mantissa >= 10 {
		mantissa, exp = 1, exp+1
	}
	return strconv.FormatFloat(mantissa, 'f', 1, 64) + "e" + strconv.FormatFloat(exp, 'f', 0, 64)
}

// odds writes the chance 10^log10p as "about 1 of 38", with two significant
// digits; past a trillion it only says so.
func odds(log10p float64) string {
	if log10p < -12 {
		return "less than 1 of a trillion"
	}
	n := roundTo(math.Pow(10, -log10p), 2)
	switch {
	case n < 1.05:
		return "nearly all"
	case n < 10:
		return "about 1 of " + trimFloat(n)
	case n < 1e6:
		return "about 1 of " + whole(int64(n))
	case n < 1e9:
		return "about 1 of " + trimFloat(n/1e6) + " million"
	case n < 1e12:
		return "about 1 of " + trimFloat(n/1e9) + " billion"
	}
	return "about 1 of a trillion"
}

func trimFloat(x float64) string {
	return strconv.FormatFloat(math.Round(x*1e9)/1e9, 'f', -1, 64)
}

// significant writes a declared number to four significant digits, without
// trailing zeros, and whole numbers whole.
func significant(x float64) string {
	if a := math.Abs(x); a >= 1000 {
		return fixed(x, 0)
	}
	if x != 0 && math.Abs(x) < 1e-6 {
		return scientific(math.Log10(math.Abs(x)))
	}
	return trimFloat(roundTo(x, 4))
}

func roundTo(x float64, digits int) float64 {
	rounded, err := strconv.ParseFloat(strconv.FormatFloat(x, 'e', digits-1, 64), 64)
	if err != nil {
		return x
	}
	return rounded
}
