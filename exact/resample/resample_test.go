package resample

import (
	"context"
	"errors"
	"math"
	"math/rand/v2"
	"slices"
	"testing"

	"tailbell/exact"
)

// near fails unless got is within tolerance of want.
func near(t *testing.T, what string, got, want, tolerance float64) {
	t.Helper()
	if !(math.Abs(got-want) <= tolerance) {
		t.Errorf("%s is %.10g, want %.10g within %g", what, got, want, tolerance)
	}
}

// lawSchool are LSAT and GPA of 15 law schools (Efron 1982, The Jackknife, the
// Bootstrap and Other Resampling Plans, section 2.5).
var lawSchool = [][2]float64{
	{576, 3.39},
	{635, 3.30},
	{558, 2.81},
	{578, 3.03},
	{666, 3.44},
	{580, 3.07},
	{555, 3.00},
	{661, 3.43},
	{651, 3.36},
	{605, 3.13},
	{653, 3.12},
	{575, 2.74},
	{545, 2.76},
	{572, 2.88},
	{594, 2.96},
}

func correlation(weight func(i int) float64) float64 {
	var w, x, y, xx, yy, xy float64
	for i, p := range lawSchool {
		wi := weight(i)
		w += wi
		x += wi * p[0]
		y += wi * p[1]
	}
	x, y = x/w, y/w
	for i, p := range lawSchool {
		wi := weight(i)
		xx += wi * (p[0] - x) * (p[0] - x)
		yy += wi * (p[1] - y) * (p[1] - y)
		xy += wi * (p[0] - x) * (p[1] - y)
	}
	return xy / math.Sqrt(xx*yy)
}

func lawCorrelation(positions []int) float64 {
	weights := make([]float64, len(lawSchool))
	for _, i := range positions {
		weights[i]++
	}
	return correlation(func(i int) float64 { return weights[i] })
}

// TestLawSchool holds the jackknife against Efron and Tibshirani 1993, An
// Introduction to the Bootstrap, and Efron 1982 (from memory, recomputed).
func TestLawSchool(t *testing.T) {
	j, err := Jackknife(Singles(len(lawSchool)), lawCorrelation)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "correlation", j.Estimate, 0.776, 5e-4)
	near(t, "jackknife standard error", j.Error(), 0.1425, 5e-5)
	near(t, "jackknife bias", j.Bias(), -0.0065, 5e-5)
	sum := 0.0
	for _, l := range j.Influence() {
		sum += l
	}
	near(t, "sum of influence", sum, 0, 1e-12)
	_, stderr, err := Infinitesimal(len(lawSchool), func(w []float64) float64 {
		return correlation(func(i int) float64 { return w[i] })
	})
	if err != nil {
		t.Fatal(err)
	}
	near(t, "infinitesimal jackknife standard error", stderr, 0.1243, 5e-5)
}

// airconditioning are hours between failures (Proschan 1963, Technometrics 5).
var airconditioning = []float64{3, 5, 7, 18, 43, 85, 91, 98, 100, 130, 230, 487}

func meanOf(data []float64) Statistic {
	return func(positions []int) float64 {
		sum := 0.0
		for _, i := range positions {
			sum += data[i]
		}
		return sum / float64(len(positions))
	}
}

// TestAirConditioning uses that the jackknife and the bootstrap standard error
// of a mean are known: s/sqrt(n), with divisor n-1 and n under the root.
func TestAirConditioning(t *testing.T) {
	n := float64(len(airconditioning))
	mean := meanOf(airconditioning)
	j, err := Jackknife(Singles(len(airconditioning)), mean)
	if err != nil {
		t.Fatal(err)
	}
	near(t, "mean", j.Estimate, 108.083, 5e-4) // Davison and Hinkley 1997, section 5
	ss := 0.0
	for _, x := range airconditioning {
		ss += (x - j.Estimate) * (x - j.Estimate)
	}
	near(t, "jackknife standard error", j.Error(), math.Sqrt(ss/(n-1)/n), 1e-10)
	near(t, "bias of a mean", j.Bias(), 0, 1e-10)
	influence, stderr, err := Infinitesimal(len(airconditioning), func(w []float64) float64 {
		sum, all := 0.0, 0.0
		for i := range w {
			sum += w[i] * airconditioning[i]
			all += w[i]
		}
		return sum / all
	})
	if err != nil {
		t.Fatal(err)
	}
	near(t, "infinitesimal standard error", stderr, math.Sqrt(ss/n/n), 1e-6)
	near(t, "influence of the outlier", influence[11], 487-j.Estimate, 1e-5)

	const draws = 40_000
	b, err := Bootstrap(t.Context(), Plan{Draws: draws, Seed: 1}, Blocks{Periods: 12, Length: 1}, mean)
	if err != nil {
		t.Fatal(err)
	}
	want := math.Sqrt(ss / n / n)
	near(t, "bootstrap standard error", b.Error(), want, 4*want/math.Sqrt(2*draws)*1.5)
	near(t, "bootstrap bias", b.Bias(), 0, 4*want/math.Sqrt(draws))
}

func TestWorkersChangeNothing(t *testing.T) {
	mean := meanOf(airconditioning)
	var first *Redrawn
	var chance Chance
	for _, workers := range []int{1, 2, 7} {
		plan := Plan{Draws: 1001, Seed: 9, Workers: workers}
		b, err := Bootstrap(t.Context(), plan, Blocks{Periods: 12, Length: 3}, mean)
		if err != nil {
			t.Fatal(err)
		}
		c, err := MonteCarlo(t.Context(), plan, func() func(*rand.Rand) bool {
			return func(rng *rand.Rand) bool { return rng.Float64() < 0.1 }
		})
		if err != nil {
			t.Fatal(err)
		}
		if first == nil {
			first, chance = b, c
		}
		if !slices.Equal(first.Values, b.Values) || chance != c {
			t.Errorf("%d workers give other results than one", workers)
		}
	}
	other, err := Bootstrap(t.Context(), Plan{Draws: 1001, Seed: 10}, Blocks{Periods: 12, Length: 3}, mean)
	if err != nil {
		t.Fatal(err)
	}
	if slices.Equal(first.Values, other.Values) {
		t.Error("another seed gives the same results")
	}
}

// TestBlocks counts how often each period is drawn: all alike with Wrap, else
// in proportion to the number of blocks that hold it.
func TestBlocks(t *testing.T) {
	const draws, seed = 30_000, 4
	for _, wrap := range []bool{false, true} {
		b := Blocks{Periods: 6, Length: 3, Wrap: wrap}
		want := [6]float64{1. / 4, 2. / 4, 3. / 4, 3. / 4, 2. / 4, 1. / 4}
		if wrap {
			want = [6]float64{.5, .5, .5, .5, .5, .5}
		}
		var seen [6]float64
		positions := make([]int, 6)
		rng := Source(seed, 0)
		for range draws {
			b.draw(rng, positions)
			for j, p := range positions {
				seen[p] += 1. / 2 / draws // two blocks a draw
				if j%3 > 0 && p != (positions[j-1]+1)%6 {
					t.Fatalf("the block is broken: %v", positions)
				}
			}
		}
		for i := range seen {
			near(t, "share of a period", seen[i], want[i], 0.012)
		}
	}
}

// TestMonteCarlo asks for a known p and for the coverage of the bounds.
func TestMonteCarlo(t *testing.T) {
	const p, runs = 0.03, 400
	missed := 0
	for seed := range uint64(runs) {
		c, err := MonteCarlo(t.Context(), Plan{Draws: 500, Seed: seed}, func() func(*rand.Rand) bool {
			return func(rng *rand.Rand) bool { return rng.Float64() < p }
		})
		if err != nil {
			t.Fatal(err)
		}
		if lower, upper := c.Bounds(0.1); p < lower || p > upper {
			missed++
		}
		if c.P() <= c.Share() {
			t.Fatal("P must count what was observed as a draw")
		}
	}
	// At most a tenth may miss: 62 or more of 400 has probability 3e-4.
	if missed > 61 {
		t.Errorf("the bounds missed %d of %d times", missed, runs)
	}
}

func TestErrors(t *testing.T) {
	mean := meanOf(airconditioning)
	if _, err := Jackknife(Singles(1), mean); !errors.Is(err, ErrTooFew) {
		t.Errorf("one part: %v", err)
	}
	undefined := func([]int) float64 { return math.NaN() }
	if _, err := Jackknife(Singles(3), undefined); !errors.Is(err, ErrUndefined) {
		t.Errorf("NaN: %v", err)
	}
	if _, err := Bootstrap(t.Context(), Plan{Draws: 10}, Blocks{Periods: 3, Length: 1}, undefined); !errors.Is(err, ErrUndefined) {
		t.Errorf("NaN: %v", err)
	}
	if _, err := Bootstrap(t.Context(), Plan{}, Blocks{Periods: 3, Length: 1}, mean); !errors.Is(err, ErrDraws) {
		t.Errorf("no draws: %v", err)
	}
	if _, err := Bootstrap(t.Context(), Plan{Draws: 10}, Blocks{Periods: 3, Length: 4}, mean); !errors.Is(err, ErrBlocks) {
		t.Errorf("long block: %v", err)
	}
	ctx, cancel := context.WithCancel(t.Context())
	cancel()
	if _, err := Bootstrap(ctx, Plan{Draws: 10}, Blocks{Periods: 12, Length: 1}, mean); !errors.Is(err, context.Canceled) {
		t.Errorf("cancelled: %v", err)
	}
	same := &Redrawn{Estimate: 5, Values: []float64{1, 2, 3}}
	if _, _, err := same.BCa(0.05, 0); !errors.Is(err, ErrUndefined) {
		t.Errorf("all on one side: %v", err)
	}
}

// fit fails if the counts seen are too far from what the probabilities
// expect, by chi-square on the cells that expect five or more.
func fit(t *testing.T, what string, seen map[int64]int, draws int, pmf func(k int64) float64) {
	t.Helper()
	chi, cells, rest, restSeen := 0.0, 0.0, float64(draws), draws
	for k, n := range seen {
		if e := pmf(k) * float64(draws); e >= 5 {
			chi += (float64(n) - e) * (float64(n) - e) / e
			cells++
			rest -= e
			restSeen -= n
		}
	}
	if rest > 5 {
		chi += (float64(restSeen) - rest) * (float64(restSeen) - rest) / rest
	}
	if limit := cells + 4.5*math.Sqrt(2*cells) + 8; chi > limit {
		t.Errorf("%s: chi-square %.1f in %g cells", what, chi, cells)
	}
}

func TestSamplers(t *testing.T) {
	const draws, seed = 40_000, 3
	rng := Source(seed, 0)
	for _, c := range []struct {
		n int64
		p float64
	}{{1, 0.3}, {40, 0.02}, {40, 0.5}, {25, 0.93}, {1000, 0.004}, {300, 0.2}, {5000, 0.7}, {3_000_000, 0.001}} {
		seen := map[int64]int{}
		for range draws {
			seen[Binomial(rng, c.n, c.p)]++
		}
		fit(t, "binomial", seen, draws, exact.NewBinomial(c.n, c.p).PMF)
	}
	weights := []float64{1, 0, 3, 0.5, 4}
	s := NewSplitter(weights)
	for _, n := range []int64{5, 50} {
		seen := [5]map[int64]int{{}, {}, {}, {}, {}}
		counts := make([]int64, 5)
		for range draws {
			s.Split(rng, n, counts)
			for i, k := range counts {
				seen[i][k]++
			}
		}
		for i, w := range weights {
			fit(t, "multinomial", seen[i], draws, exact.NewBinomial(n, w/8.5).PMF)
		}
	}
	u := NewUrn([]int64{6, 0, 10, 4})
	for _, n := range []int64{5, 17} {
		seen := map[int64]int{}
		counts := make([]int64, 4)
		for range draws {
			u.Split(rng, n, counts)
			seen[counts[2]]++
		}
		fit(t, "hypergeometric", seen, draws, exact.Hypergeometric{White: 10, Black: 10, Draws: n}.PMF)
	}
	seen := map[int64]int{}
	counts, cells := make([]int64, 5), make([]int, 12)
	for range draws {
		s.Clump(rng, 12, 2.5, counts, cells)
		seen[counts[2]]++
	}
	fit(t, "Dirichlet-multinomial", seen, draws, exact.BetaBinomial{N: 12, A: 2.5 * 3 / 8.5, B: 2.5 * 5.5 / 8.5}.PMF)
}

// TestTies: values equal to the estimate are no bias, so that BCa without
// acceleration is the percentile interval where half of the rest lie below.
func TestTies(t *testing.T) {
	r := &Redrawn{Estimate: 100}
	for v := range 201 {
		for range 1 + 200*min(1, max(0, 1-(v-100)*(v-100))) { // 201 times 100
			r.Values = append(r.Values, float64(v))
		}
	}
	lower, upper := r.Percentile(0.1)
	low, high, err := r.BCa(0.1, 0)
	if err != nil || math.Abs(low-lower) > 1e-9 || math.Abs(high-upper) > 1e-9 {
		t.Errorf("BCa is %g to %g (%v), percentiles %g to %g", low, high, err, lower, upper)
	}
	if q := r.Quantile(1e-9); q != 0 {
		t.Errorf("the least value is %g", q)
	}
}
