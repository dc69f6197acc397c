package estimate

import (
	"math"
	"testing"

	"tailbell/exact"
	"tailbell/exact/resample"
)

// TestClassics holds means, dispersion and p against what was published. The
// published p are chi-square approximations; the exact ones are a little larger,
// since the dispersion is discrete.
func TestClassics(t *testing.T) {
	for _, c := range []struct {
		name           string
		mean, meanTol  float64
		dispersion, dt float64
		p              float64 // chi-square on n-1 degrees of freedom
		exact          bool
	}{
		{"bortkiewicz_1898_10_corps", 0.61, 1e-9, 199.3, 0.05, 0.4804, true}, // Fisher 1925
		{"student_1907_sheet1", 0.6825, 1e-9, 475.72, 0.005, 0.0049, true},   // Student 1907; recomputed
		{"student_1907_sheet2", 1.3225, 1e-9, 388.2, 0.05, 0.641, true},
		{"student_1907_sheet3", 1.80, 1e-9, 435.6, 0.05, 0.100, false},
		{"student_1907_sheet4", 4.68, 1e-9, 381.0, 0.05, 0.734, false},
	} {
		counts := frequencies(t, c.name)
		s := seriesOf(c.name, counts, one)
		spread, err := spreadTable(false, []Series{s}, 1).spread(t.Context(), resample.Plan{Draws: 2000, Seed: 1}, false)
		if err != nil {
			t.Fatal(err)
		}
		n := float64(len(counts))
		near(t, c.name+" mean", float64(s.events())/n, c.mean, c.meanTol)
		near(t, c.name+" dispersion", spread.Statistic, c.dispersion, c.dt)
		near(t, c.name+" mean of the dispersion", spread.Mean, n-1, 1e-8)
		if p := spread.Chance; p.Upper < c.p || p.Lower > c.p+0.025 {
			t.Errorf("%s: p is %g to %g, chi-square gives %g", c.name, p.Lower, p.Upper, c.p)
		}
		t.Logf("%-26s spread %.4f p %.6g, exact: %v", c.name, spread.Phi, spread.Chance.P, spread.Chance.Exact)
		if spread.Chance.Exact != c.exact {
			t.Errorf("%s: exact is %v", c.name, spread.Chance.Exact)
		}
	}
}

// TestHorseKicksVariance states the divisor: Fisher's 0.611 has n-1, the 0.608
// of many texts has n.
func TestHorseKicksVariance(t *testing.T) {
	s := seriesOf("corps", frequencies(t, "bortkiewicz_1898_10_corps"), one)
	table := spreadTable(false, []Series{s}, 1)
	phi := table.statistic(table.observed) / table.mean()
	near(t, "variance with divisor n-1", phi*0.61, 0.611, 5e-4)
	near(t, "variance with divisor n", phi*0.61*199/200, 0.608, 5e-4)
}

// TestYeastTheta compares with R's MASS, example(theta.md): the moment estimate
// of negative binomial theta for the yeast counts of sheet 1, mean^2/(variance -
// mean) with divisor n-1, is mean/(phi - 1).
func TestYeastTheta(t *testing.T) {
	s := seriesOf("sheet", frequencies(t, "student_1907_sheet1"), one)
	table := spreadTable(false, []Series{s}, 1)
	phi := table.statistic(table.observed) / table.mean()
	mean := float64(s.events()) / float64(len(s.Slots))
	// MASS iterates on the degrees of freedom; the closed form is near it.
	near(t, "theta", mean/(phi-1), 3.549593, 0.02)
}

// brute is the exact p of a small table, from factorials alone.
func brute(events []int64, exposure []float64, proportion bool) (p, mean float64) {
	total, size := int64(0), 0.0
	for i, k := range events {
		total += k
		size += exposure[i]
	}
	pearson := func(k []int64) float64 {
		d := 0.0
		for i := range k {
			e := float64(total) * exposure[i] / size
			v := e
			if proportion {
				v *= 1 - float64(total)/size
			}
			d += (float64(k[i]) - e) * (float64(k[i]) - e) / v
		}
		return d
	}
	lf := func(n float64) float64 { l, _ := math.Lgamma(n + 1); return l }
	seen := pearson(events)
	k := make([]int64, len(events))
	var fall func(i int, left int64, log float64)
	fall = func(i int, left int64, log float64) {
		if i == len(k) {
			if left == 0 {
				weight := math.Exp(log)
				mean += weight * pearson(k)
				if pearson(k) >= seen-1e-9 {
					p += weight
				}
			}
			return
		}
		for n := range left + 1 {
			k[i] = n
			x := float64(n)
			if proportion {
				if x <= exposure[i] {
					fall(i+1, left-n, log+lf(exposure[i])-lf(x)-lf(exposure[i]-x))
				}
				continue
			}
			fall(i+1, left-n, log+x*math.Log(exposure[i]/size)-lf(x))
		}
	}
	log := lf(float64(total))
	if proportion {
		log = -(lf(size) - lf(float64(total)) - lf(size-float64(total)))
	}
	fall(0, total, log)
	return p, mean
}

// TestExactAgainstBrute runs the programme, the enumeration and the simulation
// on random small tables.
func TestExactAgainstBrute(t *testing.T) {
	const seed = 7
	rng := resample.Source(seed, 0)
	for round := range 120 {
		cells := 2 + rng.IntN(4)
		proportion := round%2 == 1
		even := round%4 < 2
		events, exposure := make([]int64, cells), make([]float64, cells)
		group := make([]int, cells)
		for i := range events {
			group[i] = i
			exposure[i] = float64(3 + rng.IntN(6))
			if even {
				exposure[i] = exposure[0]
			}
			events[i] = int64(rng.IntN(4))
		}
		table := newTable(proportion, cells, []stratum{{events: events, exposure: exposure, group: group}})
		if len(table.strata) == 0 {
			continue
		}
		want, mean := brute(events, exposure, proportion)
		s := &table.strata[0]
		if len(s.group) < cells {
			continue
		}
		near(t, "enumerated", table.enumerate(s), want, 1e-10)
		near(t, "mean of the statistic", table.mean(), mean, 1e-9)
		if even {
			p, ok := table.programme(s)
			if !ok {
				t.Fatal("the programme gave up on a small table")
			}
			near(t, "programme", p, want, 1e-10)
		}
		if round < 40 {
			got, err := table.simulate(t.Context(), resample.Plan{Draws: 4000, Seed: uint64(round)})
			if err != nil {
				t.Fatal(err)
			}
			// 99 % bounds; 40 of them miss more than 4 times with probability 1e-5.
			if want < got.Lower-0.01 || want > got.Upper+0.01 {
				t.Errorf("round %d: simulated %g to %g, exact %g", round, got.Lower, got.Upper, want)
			}
		}
	}
}

// TestDeepTail: the programme's p is right where 1 - bulk would be nothing. All
// of 20 events in one of 20 cells: 20/20^20.
func TestDeepTail(t *testing.T) {
	events := make([]int64, 20)
	events[3] = 20
	s := seriesOf("x", events, one)
	table := spreadTable(false, []Series{s}, 1)
	p, ok := table.programme(&table.strata[0])
	want := 20 * math.Pow(20, -20)
	if !ok || math.Abs(p/want-1) > 1e-12 {
		t.Errorf("p is %g, want %g", p, want)
	}
}

// TestStrata: the p of several series is that of the sum of their statistics.
func TestStrata(t *testing.T) {
	a := seriesOf("a", []int64{3, 0, 1}, one)
	b := seriesOf("b", []int64{0, 2}, func(i int) float64 { return float64(1 + i) })
	table := spreadTable(false, []Series{a, b, seriesOf("silent", []int64{0, 0}, one)}, 1)
	if len(table.strata) != 2 {
		t.Fatalf("%d strata, want 2", len(table.strata))
	}
	near(t, "statistic", table.statistic(table.observed), 3.5+1, 1e-12)
	near(t, "mean", table.mean(), 2+1, 1e-12)
	want := 0.0
	for x := range int64(5) {
		for y := range int64(5 - x) {
			z := 4 - x - y
			weight := 24 / (fact(x) * fact(y) * fact(z)) / 81
			d := float64(x*x+y*y+z*z)*3/4 - 4
			for u := range int64(3) {
				e := exact.NewBinomial(2, 1./3).PMF(u)
				v := float64(u) - 2./3
				if d+v*v/(2./3)+v*v/(4./3) >= 4.5-1e-9 {
					want += weight * e
				}
			}
		}
	}
	got, err := table.simulate(t.Context(), resample.Plan{Draws: 20_000, Seed: 3})
	if err != nil {
		t.Fatal(err)
	}
	if want < got.Lower || want > got.Upper {
		t.Errorf("simulated %g to %g, exact %g", got.Lower, got.Upper, want)
	}
}

func fact(n int64) float64 { return math.Round(math.Gamma(float64(n) + 1)) }

// TestBoundSpread: at the bound, so little spread has the stated probability,
// worked out over all ways in which the events can fall; and the bound covers
// the true spread.
func TestBoundSpread(t *testing.T) {
	s := seriesOf("x", []int64{4, 1, 2, 1, 0}, one)
	table := spreadTable(false, []Series{s}, 1)
	phi, _, err := table.boundSpread(t.Context(), resample.Plan{Draws: 1000, Seed: 5})
	if err != nil {
		t.Fatal(err)
	}
	p := lessSpread(8, 5, phi, table.statistic(table.observed))
	t.Logf("bound %.3f, probability there %.4f", phi, p)
	if p > boundLevel || p < boundLevel/2 {
		t.Errorf("at the bound %g the probability is %g, want a little under %g", phi, p, boundLevel)
	}
	const histories, months, mean, truth = 40, 36, 2.0, 2.2
	missed := 0
	for i := range uint64(histories) {
		rng := resample.Source(11, i)
		events := make([]int64, months)
		for j := range events {
			events[j] = resample.Poisson(rng, resample.Gamma(rng, mean/(truth-1))*(truth-1))
		}
		s := seriesOf("x", events, one)
		phi, _, err := spreadTable(false, []Series{s}, 1).boundSpread(t.Context(), resample.Plan{Draws: 1000, Seed: i})
		if err != nil {
			t.Fatal(err)
		}
		if phi < truth {
			missed++
		}
	}
	// 5 % may miss: 8 or more of 40 has probability 0.002.
	if missed > 7 {
		t.Errorf("the upper bound missed the true spread in %d of %d histories", missed, histories)
	}
	t.Logf("missed in %d of %d histories", missed, histories)
}

// lessSpread is P(statistic <= limit) for n events in equal cells under the
// Dirichlet-multinomial law of that phi.
func lessSpread(n int64, cells int, phi, limit float64) float64 {
	a := float64(n) / (phi - 1) / float64(cells)
	p := 0.0
	var fall func(cell int, left, squares int64, weight float64)
	fall = func(cell int, left, squares int64, weight float64) {
		if cell == cells-1 {
			squares += left * left
			if float64(squares)*float64(cells)/float64(n)-float64(n) <= limit+1e-9 {
				p += weight
			}
			return
		}
		law := exact.BetaBinomial{N: left, A: a, B: a * float64(cells-cell-1)}
		for k := range left + 1 {
			mass := 1.0
			if left > 0 {
				mass = law.PMF(k)
			}
			fall(cell+1, left-k, squares+k*k, weight*mass)
		}
	}
	fall(0, n, 0, 1)
	return p
}

// TestBoundSpreadOfTrials covers the beta-binomial spread.
func TestBoundSpreadOfTrials(t *testing.T) {
	const histories, months, trials, p, truth = 25, 30, 40, 0.1, 2.0
	missed := 0
	for i := range uint64(histories) {
		rng := resample.Source(13, i)
		events := make([]int64, months)
		for j := range events {
			events[j] = resample.Binomial(rng, trials, spreadChance(rng, p, trials, truth))
		}
		s := seriesOf("x", events, func(int) float64 { return trials })
		phi, _, err := spreadTable(true, []Series{s}, 1).boundSpread(t.Context(), resample.Plan{Draws: 1000, Seed: i})
		if err != nil {
			t.Fatal(err)
		}
		if phi < truth {
			missed++
		}
	}
	t.Logf("missed in %d of %d histories", missed, histories)
	if missed > 5 {
		t.Errorf("the upper bound missed the true spread in %d of %d histories", missed, histories)
	}
}

// TestSpreadChance: the beta-binomial counts have the spread that they should.
func TestSpreadChance(t *testing.T) {
	rng := resample.Source(17, 0)
	const n, p, phi, draws = 20, 0.3, 2.5, 60_000
	sum, squares := 0.0, 0.0
	for range draws {
		k := float64(resample.Binomial(rng, n, spreadChance(rng, p, n, phi)))
		sum += k
		squares += k * k
	}
	mean := sum / draws
	near(t, "mean", mean, n*p, 0.06)
	near(t, "variance", squares/draws-mean*mean, phi*n*p*(1-p), 0.25)
}
