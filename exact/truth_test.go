package exact_test

import (
	"bytes"
	"compress/gzip"
	"encoding/csv"
	"fmt"
	"math"
	"math/big"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"

	"tailbell/exact"
)

// The truth tables hold values computed with mpmath to 50 digits for the exact float64 inputs
// (shortest decimals that round-trip). Columns: p, log_p, midp, pmf and logs of one tail; bounds
// with each tail exactly alpha/2; two-sided p with exact ties counted.

type truth struct {
	rows [][]string
	col  map[string]int
}

func readTruth(tb testing.TB, name string) truth {
	tb.Helper()
	raw, err := os.ReadFile(filepath.Join("..", "testdata", "exact", name+".csv.gz"))
	if err != nil {
		tb.Fatal(err)
	}
	z, err := gzip.NewReader(bytes.NewReader(raw))
	if err != nil {
		tb.Fatal(err)
	}
	rows, err := csv.NewReader(z).ReadAll()
	if err != nil {
		tb.Fatal(err)
	}
	t := truth{rows: rows[1:], col: map[string]int{}}
	for i, h := range rows[0] {
		t.col[h] = i
	}
	return t
}

func (t truth) text(r []string, c string) string { return r[t.col[c]] }

func (t truth) float(tb testing.TB, r []string, c string) float64 {
	tb.Helper()
	v, err := strconv.ParseFloat(t.text(r, c), 64)
	if err != nil {
		tb.Fatal(err)
	}
	return v
}

func (t truth) int(tb testing.TB, r []string, c string) int64 {
	tb.Helper()
	v, err := strconv.ParseInt(t.text(r, c), 10, 64)
	if err != nil {
		tb.Fatal(err)
	}
	return v
}

// relative is |got/want - 1| with want read to 200 bits; values that float64 can't hold count
// as met by anything that tiny.
func relative(tb testing.TB, got float64, want string) float64 {
	tb.Helper()
	if i := strings.Index(want, "e-"); i > 0 {
		if e, err := strconv.Atoi(want[i+2:]); err != nil || e > 307 {
			if math.Abs(got) < 1e-300 {
				return 0
			}
			return math.Inf(1)
		}
	}
	w, _, err := big.ParseFloat(want, 10, 200, big.ToNearestEven)
	if err != nil {
		tb.Fatal(err)
	}
	if math.IsNaN(got) || math.IsInf(got, 0) {
		return math.Inf(1)
	}
	g := new(big.Float).SetPrec(200).SetFloat64(got)
	if w.Sign() == 0 {
		if got == 0 {
			return 0
		}
		return math.Inf(1)
	}
	f, _ := g.Quo(g.Sub(g, w), w).Float64()
	return math.Abs(f)
}

// gauge keeps the worst error of each quantity and where it was.
type gauge struct {
	worst map[string]float64
	at    map[string]string
	rows  map[string]int
}

func newGauge() gauge {
	return gauge{map[string]float64{}, map[string]string{}, map[string]int{}}
}

func (g gauge) note(key string, err float64, at any) {
	g.rows[key]++
	if err >= g.worst[key] {
		g.worst[key], g.at[key] = err, fmt.Sprint(at)
	}
}

func (g gauge) hold(t *testing.T, gate map[string]float64) {
	t.Helper()
	var keys []string
	for k := range g.worst {
		keys = append(keys, k)
	}
	slices.Sort(keys)
	for _, k := range keys {
		limit := 0.0
		for name, l := range gate {
			if k == name || strings.HasPrefix(k, name+" ") {
				limit = l
			}
		}
		t.Logf("%-34s %6d rows, worst %.2g (gate %.0e)", k, g.rows[k], g.worst[k], limit)
		if !(g.worst[k] <= limit) {
			t.Errorf("%s: %.3g at %s", k, g.worst[k], g.at[k])
		}
	}
}

// discrete is what every one-sample law offers.
type discrete interface {
	PMF(k int64) float64
	LogPMF(k int64) float64
	Upper(k int64) float64
	LogUpper(k int64) float64
	Lower(k int64) float64
	LogLower(k int64) float64
	MidUpper(k int64) float64
	LogMidUpper(k int64) float64
	MidLower(k int64) float64
	LogMidLower(k int64) float64
	CriticalUpper(limit float64) (int64, float64, bool)
	CriticalLower(limit float64) (int64, float64, bool)
}

func gradeTail(t *testing.T, g gauge, tr truth, r []string, x discrete, k int64) {
	t.Helper()
	p, lp, mp, lmp := x.Upper, x.LogUpper, x.MidUpper, x.LogMidUpper
	if tr.text(r, "tail") == "lower" {
		p, lp, mp, lmp = x.Lower, x.LogLower, x.MidLower, x.LogMidLower
	}
	at := strings.Join(r[:7], ",")
	if reg := tr.text(r, "region"); reg != "subnormal" && reg != "logonly" {
		g.note("p "+reg, relative(t, p(k), tr.text(r, "p")), at)
		g.note("p mid", relative(t, mp(k), tr.text(r, "midp")), at)
	}
	g.note("p pmf", relative(t, x.PMF(k), tr.text(r, "pmf")), at)
	g.note("log p", relative(t, lp(k), tr.text(r, "log_p")), at)
	g.note("log mid", relative(t, lmp(k), tr.text(r, "log_midp")), at)
	g.note("log pmf", relative(t, x.LogPMF(k), tr.text(r, "log_pmf")), at)
}

func TestTruthTails(t *testing.T) {
	for _, c := range []struct {
		table string
		count string
		p     float64
		law   func(tr truth, r []string) discrete
	}{
		{"poisson_tail", "k", 1e-14, func(tr truth, r []string) discrete {
			return exact.Poisson{Rate: tr.float(t, r, "mu"), Exposure: 1}
		}},
		{"binomial_tail", "k", 1e-14, func(tr truth, r []string) discrete {
			return exact.NewBinomial(tr.int(t, r, "n"), tr.float(t, r, "theta"))
		}},
		{"hypergeom_tail", "x", 1e-13, func(tr truth, r []string) discrete {
			return exact.Hypergeometric{White: tr.int(t, r, "m_white"), Black: tr.int(t, r, "n_black"), Draws: tr.int(t, r, "k_draws")}
		}},
		{"negbin_tail", "x", 1e-14, func(tr truth, r []string) discrete {
			return exact.NegativeBinomial{Rate: tr.float(t, r, "mu"), Exposure: 1, Size: tr.float(t, r, "size")}
		}},
	} {
		t.Run(c.table, func(t *testing.T) {
			tr, g := readTruth(t, c.table), newGauge()
			for _, r := range tr.rows {
				gradeTail(t, g, tr, r, c.law(tr, r), tr.int(t, r, c.count))
			}
			g.hold(t, map[string]float64{"p": c.p, "log": c.p})
		})
	}
}

func TestTruthBounds(t *testing.T) {
	t.Run("poisson", func(t *testing.T) {
		tr, g := readTruth(t, "poisson_bounds"), newGauge()
		for _, r := range tr.rows {
			f := exact.Garwood
			if tr.text(r, "kind") == "midp" {
				f = exact.GarwoodMid
			}
			l, u := f(tr.int(t, r, "k"), tr.float(t, r, "alpha"))
			g.note(tr.text(r, "kind")+" lower", relative(t, l, tr.text(r, "lower")), r)
			g.note(tr.text(r, "kind")+" upper", relative(t, u, tr.text(r, "upper")), r)
		}
		g.hold(t, map[string]float64{"exact": 4e-15, "midp": 4e-15})
	})
	t.Run("binomial", func(t *testing.T) {
		tr, g := readTruth(t, "binomial_bounds"), newGauge()
		for _, r := range tr.rows {
			f := exact.ClopperPearson
			if tr.text(r, "kind") == "midp" {
				f = exact.ClopperPearsonMid
			}
			x, n, a := tr.int(t, r, "x"), tr.int(t, r, "n"), tr.float(t, r, "alpha")
			l, u := f(x, n, a)
			v, w := f(n-x, n, a)
			kind := tr.text(r, "kind")
			g.note(kind+" lower", relative(t, l, tr.text(r, "lower")), r)
			g.note(kind+" upper", relative(t, u, tr.text(r, "upper")), r)
			g.note(kind+" 1-lower", relative(t, w, tr.text(r, "one_minus_lower")), r)
			g.note(kind+" 1-upper", relative(t, v, tr.text(r, "one_minus_upper")), r)
		}
		g.hold(t, map[string]float64{"exact": 4e-15, "midp": 4e-15})
	})
}

func TestTruthTwoSided(t *testing.T) {
	tr, g := readTruth(t, "twosided"), newGauge()
	for _, r := range tr.rows {
		var x interface {
			TwoSided(k int64, how exact.Sides) float64
			LogTwoSided(k int64, how exact.Sides) float64
		}
		par := tr.float(t, r, "mu_or_theta")
		switch d := tr.text(r, "dist"); d {
		case "poisson":
			x = exact.Poisson{Rate: par, Exposure: 1}
		case "binomial":
			x = exact.NewBinomial(tr.int(t, r, "n"), par)
		default:
			t.Fatal(d)
		}
		k := tr.int(t, r, "k")
		g.note("minlike", relative(t, x.TwoSided(k, exact.MinLike), tr.text(r, "p_minlike_exact")), r)
		g.note("central", relative(t, x.TwoSided(k, exact.Central), tr.text(r, "p_central")), r)
		for _, how := range []exact.Sides{exact.Central, exact.MinLike, exact.Blaker} {
			if p := x.TwoSided(k, how); p > 1e-300 {
				g.note("log", math.Abs(math.Exp(x.LogTwoSided(k, how))/p-1), r)
			}
		}
	}
	g.hold(t, map[string]float64{"minlike": 1e-13, "central": 1e-13, "log": 1e-12})
}

// more_tails.csv.gz: random cases of the laws without a table of their own, summed term by term
// with mpmath at 60 digits.
func TestTruthMore(t *testing.T) {
	tr, g := readTruth(t, "more_tails"), newGauge()
	for _, r := range tr.rows {
		var x discrete
		law := tr.text(r, "law")
		switch law {
		case "betabinomial":
			x = exact.BetaBinomial{N: tr.int(t, r, "a"), A: tr.float(t, r, "b"), B: tr.float(t, r, "c")}
		case "noncentral":
			x = exact.FisherNoncentral{White: tr.int(t, r, "a"), Black: tr.int(t, r, "b"), Draws: tr.int(t, r, "c"), Odds: tr.float(t, r, "d")}
		case "negbin":
			x = exact.NegativeBinomial{Rate: tr.float(t, r, "a"), Exposure: 1, Size: tr.float(t, r, "b")}
		}
		k := tr.int(t, r, "k")
		at := strings.Join(r[:6], ",")
		g.note(law+" upper", relative(t, x.Upper(k), tr.text(r, "upper")), at)
		g.note(law+" lower", relative(t, x.Lower(k), tr.text(r, "lower")), at)
		g.note(law+" pmf", relative(t, x.PMF(k), tr.text(r, "pmf")), at)
		g.note(law+" log upper", relative(t, x.LogUpper(k), tr.text(r, "log_upper")), at)
		g.note(law+" log lower", relative(t, x.LogLower(k), tr.text(r, "log_lower")), at)
		if tr.float(t, r, "pmf") < 0.999 { // past that the table's own digits run out
			g.note(law+" log pmf", relative(t, x.LogPMF(k), tr.text(r, "log_pmf")), at)
		}
	}
	g.hold(t, map[string]float64{"betabinomial": 1e-13, "noncentral": 1e-13, "negbin": 1e-14})
}

// fresh_tails.csv.gz: random cases to mu = 1e9 and n = 1e12, the probability by mpmath's log
// gamma, the ratio by quadrature, at 45 digits: a method unlike the other tables'.
func TestTruthFresh(t *testing.T) {
	tr, g := readTruth(t, "fresh_tails"), newGauge()
	for _, r := range tr.rows {
		var x discrete = exact.Poisson{Rate: tr.float(t, r, "par"), Exposure: 1}
		if tr.text(r, "law") == "binomial" {
			x = exact.NewBinomial(tr.int(t, r, "n"), tr.float(t, r, "par"))
		}
		k := tr.int(t, r, "k")
		p, lp := x.Lower(k), x.LogLower(k)
		if tr.text(r, "tail") == "upper" {
			p, lp = x.Upper(k), x.LogUpper(k)
		}
		g.note("p "+tr.text(r, "law"), relative(t, p, tr.text(r, "p")), r[:5])
		g.note("log "+tr.text(r, "law"), relative(t, lp, tr.text(r, "log_p")), r[:5])
		g.note("pmf "+tr.text(r, "law"), relative(t, x.PMF(k), tr.text(r, "pmf")), r[:5])
	}
	g.hold(t, map[string]float64{"p": 1e-14, "log": 1e-14, "pmf": 1e-14})
}
