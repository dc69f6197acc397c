package exact_test

import (
	"math"
	"slices"
	"strconv"
	"strings"
	"testing"

	"gonum.org/v1/gonum/integrate/quad"
	"gonum.org/v1/gonum/mat"

	"tailbell/exact"
)

// kulldorff is the size of the sequential test that rings as soon as n events
// have come while m were expected and m - n + n log(n/m) reaches the limit, n > m,
// up to m = upTo: one minus the probability that the n-th event comes too late to
// ring for every n. Between the latest moments at which the n-th rings the count
// moves by independent Poisson numbers.
func kulldorff(limit, upTo float64) float64 {
	state := []float64{1} // by events so far, none of which rang
	at := 0.0
	for n := 1; at < upTo; n++ {
		next := min(upTo, latest(float64(n), limit))
		step := exact.Poisson{Rate: next - at, Exposure: 1}
		moved := make([]float64, n) // fewer than n events by then
		for i, p := range state {
			for j := i; j < n; j++ {
				moved[j] += p * step.PMF(int64(j-i))
			}
		}
		state, at = moved, next
	}
	quiet := 0.0
	for _, p := range state {
		quiet += p
	}
	return 1 - quiet
}

// latest is the largest m < n at which m - n + n log(n/m) is at least the limit.
func latest(n, limit float64) float64 {
	lo, hi := 0.0, n
	for range 200 {
		m := (lo + hi) / 2
		if m-n+n*math.Log(n/m) >= limit {
			lo = m
		} else {
			hi = m
		}
	}
	return lo
}

func TestPublishedSequential(t *testing.T) {
	src := "E01 Kulldorff, Davis, Kolczak, Lewis, Lieu & Platt 2011, Sequential Analysis 30:58, Table 1 (as transcribed in a public R script)"
	for alpha, table := range map[float64]string{
		0.05: `0.1 2.044069 0.5 2.637928 1.5 2.964971 2 3.046977 3 3.162106 5 3.297183 6 3.342729 10 3.467952 15 3.562591 20 3.628123
			30 3.715764 50 3.819903 60 3.855755 100 3.952321`,
		0.01: "0.1 4.119293 1 4.670428 3 4.971792 10 5.260513 20 5.414770 100 5.738974",
	} {
		f := strings.Fields(table)
		for i := 0; i < len(f); i += 2 {
			upTo, limit := decimal(t, f[i]), decimal(t, f[i+1])
			// the printed limit, half a unit in its last place either way, holds alpha between its sizes
			if over, under := kulldorff(limit-5.1e-7, upTo), kulldorff(limit+5.1e-7, upTo); !(over >= alpha && under <= alpha) {
				t.Errorf("%s: up to %s at %s: sizes %.10g to %.10g, alpha %g", src, f[i], f[i+1], over, under, alpha)
			}
		}
	}

	src = "E02a NIST/SEMATECH e-Handbook 6.2.6, sequential test of 0.01 against 0.1 (from memory)"
	score := func(n, k int64) float64 {
		return exact.NewBinomial(n, 0.1).LogPMF(k) - exact.NewBinomial(n, 0.01).LogPMF(k)
	}
	event, miss := score(1, 1), score(1, 0)
	reject, accept := math.Log((1-0.1)/0.05), math.Log(0.1/(1-0.05))
	printed(t, src+" slope", -miss/(event-miss), "0.0397")
	printed(t, src+" h0", -accept/(event-miss), "0.939")
	printed(t, src+" h1", reject/(event-miss), "1.205")
	for n := int64(2); n <= 30; n++ {
		want := int64(2)
		if n >= 20 { // 1.2054 + 0.0397474 x 20 = 2.0003
			want = 3
		}
		if score(n, want) < reject || score(n, want-1) >= reject {
			t.Errorf("%s: at %d trials it does not reject from %d events on", src, n, want)
		}
		if accepts := score(n, 0) <= accept; accepts != (n >= 24) {
			t.Errorf("%s: at %d trials without event it accepts: %t", src, n, accepts)
		}
	}

	src = "E05 Lucas 1985, Technometrics 27:129, reference value from 4 to 7 (from memory)"
	ratio := func(k int64) float64 {
		return exact.Poisson{Rate: 7, Exposure: 1}.LogPMF(k) - exact.Poisson{Rate: 4, Exposure: 1}.LogPMF(k)
	}
	printed(t, src, -ratio(0)/(ratio(1)-ratio(0)), "5.36") // the count that speaks for neither
}

func decimal(t *testing.T, s string) float64 {
	t.Helper()
	v, err := strconv.ParseFloat(s, 64)
	if err != nil {
		t.Fatal(err)
	}
	return v
}

// runLength solves (I - Q) L = 1: the mean number of steps from each state of a
// chain until it leaves them.
func runLength(t *testing.T, q *mat.Dense) []float64 {
	t.Helper()
	n, _ := q.Dims()
	left := mat.NewDense(n, n, nil)
	ones := mat.NewVecDense(n, nil)
	for i := range n {
		ones.SetVec(i, 1)
		for j := range n {
			left.Set(i, j, -q.At(i, j))
		}
		left.Set(i, i, 1-q.At(i, i))
	}
	var l mat.VecDense
	if err := l.SolveVec(left, ones); err != nil {
		t.Fatal(err)
	}
	return slices.Clone(l.RawVector().Data)
}

// TestRunLengths holds mean run lengths of cumulative sums: for counts by the
// chain of their states, with this package's probabilities; for a normal variable
// by quadrature, which checks the solver against values in print.
func TestRunLengths(t *testing.T) {
	src := "E04a by definition (Brook & Evans 1972, Biometrika 59:539): S = max(0, S+X-k), alarm at S >= h, started at 0"
	for _, c := range []struct {
		k, h int64
		want float64
	}{{1, 1, 3.784422382354666}, {2, 3, 151.61161837}, {2, 4, 537.69828249}, {2, 5, 1903.54349453}} {
		x := exact.Poisson{Rate: 1, Exposure: 1}
		q := mat.NewDense(int(c.h), int(c.h), nil)
		for s := range c.h {
			q.Set(int(s), 0, x.Lower(c.k-s))
			for to := int64(1); to < c.h; to++ {
				q.Set(int(s), int(to), x.PMF(to-s+c.k))
			}
		}
		if got := runLength(t, q)[0]; math.Abs(got/c.want-1) > 2e-11 {
			t.Errorf("%s: k %d, h %d: %.12g, want %.12g", src, c.k, c.h, got, c.want)
		}
	}
	x := exact.Poisson{Rate: 1, Exposure: 1}
	if got, want := 1/(1-x.Lower(1)), 3.784422382354666; math.Abs(got/want-1) > 1e-14 { // 1/(1-2/e)
		t.Errorf("%s: closed form %.16g, want %.16g", src, got, want)
	}

	src = "E03 Montgomery, Introduction to Statistical Quality Control, table of the tabular cumulative sum; Lucas & Crosier 1982 (from memory)"
	for h, row := range map[float64]map[float64]string{
		4: {0: "168", 0.25: "74.2", 0.5: "26.6", 0.75: "13.3", 1: "8.38", 1.5: "4.75", 2: "3.34", 3: "2.19"},
		5: {0: "465", 0.25: "139", 0.5: "38.0", 0.75: "17.0", 1: "10.4", 1.5: "5.75", 2: "4.01", 3: "2.57"},
	} {
		for shift, want := range row {
			both := 1 / normalRun(t, 0.5, h, shift)
			if shift <= 1 { // beyond that the other side comes once in more than 1e7
				both += 1 / normalRun(t, 0.5, h, -shift)
			}
			printed(t, src, 1/both, want)
		}
	}
}

// normalRun is the mean run length of one side for a normal variable of mean
// shift, by Nystrom's method: the chain over 120 Gauss-Legendre points and zero.
func normalRun(t *testing.T, k, h, shift float64) float64 {
	t.Helper()
	const n = 120
	points, weights := make([]float64, n), make([]float64, n)
	quad.Legendre{}.FixedLocations(points, weights, 0, h)
	density := func(v float64) float64 { return math.Exp(-v*v/2) / math.Sqrt(2*math.Pi) }
	q := mat.NewDense(n+1, n+1, nil)
	for i, s := range append([]float64{0}, points...) {
		q.Set(i, 0, math.Erfc(-(k-s-shift)/math.Sqrt2)/2)
		for j, to := range points {
			q.Set(i, j+1, weights[j]*density(to-s+k-shift))
		}
	}
	return runLength(t, q)[0]
}
