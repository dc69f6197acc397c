package exact_test

import (
	"math"
	"testing"

	"pgregory.net/rapid"

	"tailbell/exact"
)

func near(a, b, tol float64) bool {
	return a == b || math.Abs(a-b) <= 1e-305+tol*math.Max(math.Abs(a), math.Abs(b))
}

func logUniform(t *rapid.T, name string, lo, hi float64) float64 {
	return math.Exp(rapid.Float64Range(math.Log(lo), math.Log(hi)).Draw(t, name))
}

// drawLaw draws any law, and a count within a dozen deviations of its middle.
func drawLaw(t *rapid.T) (discrete, int64) {
	around := func(mean, sd float64, top int64) int64 {
		k := int64(mean + sd*rapid.Float64Range(-12, 12).Draw(t, "z"))
		return max(0, min(top, k))
	}
	switch rapid.IntRange(0, 5).Draw(t, "law") {
	case 0:
		mu := logUniform(t, "mu", 1e-8, 1e9)
		return exact.Poisson{Rate: mu / 7, Exposure: 7}, around(mu, math.Sqrt(mu)+1, 1<<40)
	case 1:
		n := int64(logUniform(t, "n", 1, 1e12))
		p := logUniform(t, "p", 1e-9, 1)
		m := float64(n) * p
		if rapid.Bool().Draw(t, "mirror") {
			return exact.Binomial{N: n, P: 1 - p, Q: p}, n - around(m, math.Sqrt(m)+1, n)
		}
		return exact.NewBinomial(n, p), around(m, math.Sqrt(m)+1, n)
	case 2:
		x := exact.Hypergeometric{White: int64(logUniform(t, "w", 1, 1e6)), Black: int64(logUniform(t, "b", 1, 1e6))}
		x.Draws = int64(float64(x.White+x.Black) * rapid.Float64Range(0, 1).Draw(t, "d"))
		lo, hi := max(0, x.Draws-x.Black), min(x.White, x.Draws)
		m := float64(x.Draws) * float64(x.White) / float64(x.White+x.Black)
		return x, max(lo, around(m, math.Sqrt(m)+1, hi))
	case 3:
		x := exact.FisherNoncentral{
			White: int64(logUniform(t, "w", 1, 1e4)), Black: int64(logUniform(t, "b", 1, 1e4)),
			Odds: logUniform(t, "odds", 1e-5, 1e5),
		}
		x.Draws = int64(float64(x.White+x.Black) * rapid.Float64Range(0, 1).Draw(t, "d"))
		lo, hi := max(0, x.Draws-x.Black), min(x.White, x.Draws)
		return x, max(lo, around(x.Mean(), 3, hi))
	case 4:
		mu, size := logUniform(t, "mu", 1e-3, 1e7), logUniform(t, "size", 1e-3, 1e8)
		return exact.NegativeBinomial{Rate: mu, Exposure: 1, Size: size}, around(mu, math.Sqrt(mu+mu*mu/size), 1<<40)
	default:
		x := exact.BetaBinomial{N: int64(logUniform(t, "n", 1, 3000)), A: logUniform(t, "a", 1e-2, 1e4), B: logUniform(t, "b", 1e-2, 1e4)}
		return x, rapid.Int64Range(0, x.N).Draw(t, "k")
	}
}

func TestIdentitiesOfTails(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		x, k := drawLaw(t)
		u, l, pm := x.Upper(k), x.Lower(k), x.PMF(k)
		if !(u >= 0 && u <= 1 && l >= 0 && l <= 1) {
			t.Fatalf("%+v at %d: tails %v %v", x, k, u, l)
		}
		if !near(u+x.Lower(k-1), 1, 1e-13) || !near(u+l-pm, 1, 1e-13) {
			t.Fatalf("%+v at %d: upper %v, lower %v, pmf %v", x, k, u, l, pm)
		}
		const tol = 2e-12
		if pm > 1e-300 {
			if !near(u-x.Upper(k+1), pm, tol*(1+u/pm)) || !near(math.Exp(x.LogPMF(k)), pm, 1e-12) {
				t.Fatalf("%+v at %d: difference of tails is not pmf %v", x, k, pm)
			}
			if !near(x.MidUpper(k), u-pm/2, 1e-13*(1+u/pm)) || !near(x.MidLower(k)+x.MidUpper(k), 1, 1e-13) {
				t.Fatalf("%+v at %d: mid %v", x, k, x.MidUpper(k))
			}
		}
		if x.LogUpper(k+1) > x.LogUpper(k)+1e-14 || x.LogLower(k-1) > x.LogLower(k)+1e-14 {
			t.Fatalf("%+v at %d: not monotone", x, k)
		}
		if u > 1e-290 && !near(math.Exp(x.LogUpper(k)), u, 1e-12) {
			t.Fatalf("%+v at %d: log upper %v, upper %v", x, k, x.LogUpper(k), u)
		}
		if math.IsNaN(x.LogUpper(k)) || math.IsInf(x.LogLower(k), 0) && k >= 0 && pm > 0 {
			t.Fatalf("%+v at %d: logs %v %v", x, k, x.LogUpper(k), x.LogLower(k))
		}
	})
}

func TestIdentitiesOfCriticalCounts(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		x, _ := drawLaw(t)
		limit := logUniform(t, "limit", 1e-60, 0.9)
		if k, size, ok := x.CriticalUpper(limit); ok {
			if size != x.Upper(k) || size > limit*(1+1e-14) || x.Upper(k-1) <= limit*(1-1e-14) {
				t.Fatalf("%+v, limit %g: critical %d of size %g, before it %g", x, limit, k, size, x.Upper(k-1))
			}
		}
		if k, size, ok := x.CriticalLower(limit); ok {
			if size != x.Lower(k) || size > limit*(1+1e-14) || x.Lower(k+1) <= limit*(1-1e-14) {
				t.Fatalf("%+v, limit %g: critical %d of size %g, after it %g", x, limit, k, size, x.Lower(k+1))
			}
		} else if x.PMF(0) > 0 && x.Lower(0) <= limit {
			t.Fatalf("%+v, limit %g: 0 signals", x, limit)
		}
	})
}

func TestIdentitiesOfConditionalCriticalCounts(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		limit := logUniform(t, "limit", 1e-30, 0.9)
		type look interface {
			Upper(int64) float64
			Lower(int64) float64
			CriticalUpper(float64) (int64, float64, bool)
			CriticalLower(float64) (int64, float64, bool)
		}
		var x look = exact.TwoRate{
			RefEvents: int64(logUniform(t, "m", 1, 1e6)) - 1, Exposure: logUniform(t, "e", 1e-3, 1e3),
			RefExposure: logUniform(t, "f", 1e-3, 1e3), Margin: rapid.SampledFrom([]float64{0, 1, 1.5}).Draw(t, "margin"),
		}
		if rapid.Bool().Draw(t, "proportion") {
			y := exact.TwoProportion{RefTrials: int64(logUniform(t, "rt", 1, 1e4)), Trials: int64(logUniform(t, "n", 1, 1e4)), Margin: rapid.SampledFrom([]float64{0, 1, 1.5}).Draw(t, "margin2")}
			y.RefEvents = rapid.Int64Range(0, y.RefTrials).Draw(t, "re")
			x = y
		}
		if k, size, ok := x.CriticalUpper(limit); ok && (size > limit*(1+1e-14) || k > 0 && x.Upper(k-1) <= limit*(1-1e-14)) {
			t.Fatalf("%+v, limit %g: critical %d of size %g, before it %g", x, limit, k, size, x.Upper(k-1))
		}
		if k, size, ok := x.CriticalLower(limit); ok && (size > limit*(1+1e-14) || x.Lower(k+1) <= limit*(1-1e-14)) {
			t.Fatalf("%+v, limit %g: critical %d of size %g, after it %g", x, limit, k, size, x.Lower(k+1))
		}
	})
}

func TestIdentitiesOfDuality(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		k := int64(logUniform(t, "k", 1, 1e6))
		mu := float64(k) * rapid.Float64Range(0.8, 1.25).Draw(t, "r")
		// Poisson and gamma: the k-th event comes within t as often as k fall into t
		if w := (exact.Wait{Events: k, Rate: mu}).Within(1); w != (exact.Poisson{Rate: mu, Exposure: 1}).Upper(k) {
			t.Fatal(k, mu, w)
		}
		// binomial and beta: the reflection X -> n-X
		n := k + int64(logUniform(t, "n", 1, 1e6))
		p := rapid.Float64Range(1e-6, 1-1e-6).Draw(t, "p")
		a := exact.Binomial{N: n, P: p, Q: 1 - p}
		b := exact.Binomial{N: n, P: a.Q, Q: a.P}
		if a.LogUpper(k) != b.LogLower(n-k) || a.LogPMF(k) != b.LogPMF(n-k) && !near(a.LogPMF(k), b.LogPMF(n-k), 1e-14) {
			t.Fatal(a, k, a.LogUpper(k), b.LogLower(n-k), a.LogPMF(k), b.LogPMF(n-k))
		}
		// monotone in the mean
		if (exact.Poisson{Rate: mu, Exposure: 1}).LogUpper(k) > (exact.Poisson{Rate: mu * 1.001, Exposure: 1}).LogUpper(k) {
			t.Fatal(k, mu)
		}
		// a hypergeometric is symmetric in white and drawn
		h := exact.Hypergeometric{White: 40, Black: 60, Draws: rapid.Int64Range(1, 99).Draw(t, "draws")}
		g := exact.Hypergeometric{White: h.Draws, Black: 100 - h.Draws, Draws: 40}
		x := rapid.Int64Range(0, 40).Draw(t, "x")
		if !near(h.Upper(x), g.Upper(x), 1e-14) {
			t.Fatal(h, x, h.Upper(x), g.Upper(x))
		}
		// two rates: swapping them turns the tail over
		r := exact.TwoRate{RefEvents: n, Exposure: 3, RefExposure: 7}
		s := exact.TwoRate{RefEvents: k, Exposure: 7, RefExposure: 3}
		if !near(r.LogUpper(k), s.LogLower(n), 1e-13) {
			t.Fatal(k, n, r.LogUpper(k), s.LogLower(n))
		}
	})
}

func TestIdentitiesOfBounds(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		alpha := logUniform(t, "alpha", 1e-30, 1)
		k := int64(logUniform(t, "k", 1, 1e6)) - 1
		l, u := exact.Garwood(k, alpha)
		at := func(mu float64) exact.Poisson { return exact.Poisson{Rate: mu, Exposure: 1} }
		tol := 1e-13 * (1 + math.Sqrt(float64(k))*20)
		if k > 0 && !near(at(l).Upper(k), alpha/2, tol) || !near(at(u).Lower(k), alpha/2, tol) {
			t.Fatalf("k = %d, alpha = %g: bounds %v %v leave %v %v", k, alpha, l, u, at(l).Upper(k), at(u).Lower(k))
		}
		n := k + int64(logUniform(t, "n", 1, 1e9))
		pl, pu := exact.ClopperPearson(k, n, alpha)
		ql, qu := exact.ClopperPearson(n-k, n, alpha)
		bin := func(p, q float64) exact.Binomial { return exact.Binomial{N: n, P: p, Q: q} }
		if k > 0 && !near(bin(pl, qu).Upper(k), alpha/2, tol) || k < n && !near(bin(pu, ql).Lower(k), alpha/2, tol) {
			t.Fatalf("%d of %d, alpha = %g: bounds %v %v", k, n, alpha, pl, pu)
		}
		a := rapid.Float64Range(1e-9, 1-1e-9).Draw(t, "a")
		if v := exact.MeanLower(k, a); k > 0 && !near(at(v).Upper(k), a, tol) {
			t.Fatalf("k = %d: lower bound %v at %v leaves %v", k, v, a, at(v).Upper(k))
		}
		if v := exact.MeanUpper(k, a); !near(at(v).Lower(k), a, tol) {
			t.Fatalf("k = %d: upper bound %v at %v leaves %v", k, v, a, at(v).Lower(k))
		}
		if v := bin(exact.ChanceLower(k, n, a), exact.ChanceUpper(n-k, n, a)); k > 0 && !near(v.Upper(k), a, tol) {
			t.Fatalf("%d of %d: lower bound %v at %v leaves %v", k, n, v, a, v.Upper(k))
		}
		if v := bin(exact.ChanceUpper(k, n, a), exact.ChanceLower(n-k, n, a)); k < n && !near(v.Lower(k), a, tol) {
			t.Fatalf("%d of %d: upper bound %v at %v leaves %v", k, n, v, a, v.Lower(k))
		}
		if ml, mu := exact.GarwoodMid(k, alpha); ml < l*(1-1e-14) || mu > u*(1+1e-14) {
			t.Fatalf("k = %d, alpha = %g: mid %v %v outside %v %v", k, alpha, ml, mu, l, u)
		}
		m := rapid.Int64Range(0, 1000).Draw(t, "m")
		x := exact.TwoRate{RefEvents: m, Exposure: 2, RefExposure: 5}
		if k+m > 0 {
			lo, hi := x.RatioBounds(k, alpha)
			if x.Margin = lo; k > 0 && !near(x.Upper(k), alpha/2, tol*10) {
				t.Fatalf("%+v, %d: ratio bound %v leaves %v, not %v", x, k, lo, x.Upper(k), alpha/2)
			}
			if x.Margin = hi; m > 0 && !near(x.Lower(k), alpha/2, tol*10) {
				t.Fatalf("%+v, %d: ratio bound %v leaves %v, not %v", x, k, hi, x.Lower(k), alpha/2)
			}
		}
	})
}

func TestIdentitiesOfOddsBounds(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		x := exact.TwoProportion{RefTrials: rapid.Int64Range(1, 300).Draw(t, "rt"), Trials: rapid.Int64Range(1, 300).Draw(t, "n")}
		x.RefEvents = rapid.Int64Range(0, x.RefTrials).Draw(t, "re")
		k := rapid.Int64Range(0, x.Trials).Draw(t, "k")
		alpha := logUniform(t, "alpha", 1e-12, 1)
		l, u := x.OddsRatioBounds(k, alpha)
		if l > 0 {
			if x.Margin = l; !near(x.Upper(k), alpha/2, 1e-11) {
				t.Fatalf("%+v, %d: %v leaves %v, not %v", x, k, l, x.Upper(k), alpha/2)
			}
		}
		if !math.IsInf(u, 1) {
			if x.Margin = u; !near(x.Lower(k), alpha/2, 1e-11) {
				t.Fatalf("%+v, %d: %v leaves %v, not %v", x, k, u, x.Lower(k), alpha/2)
			}
		}
	})
}

// The two-sided forms against their definitions, count by count.
func TestTwoSidedByEnumeration(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		n := rapid.Int64Range(1, 60).Draw(t, "n")
		x := exact.NewBinomial(n, rapid.SampledFrom([]float64{0.5, 0.25, 0.1, 0.37, 0.93}).Draw(t, "p"))
		k := rapid.Int64Range(0, n).Draw(t, "k")
		least := func(j int64) float64 { return math.Min(x.Upper(j), x.Lower(j)) }
		minlike, blaker := 0.0, 0.0
		for j := range n + 1 {
			if x.PMF(j) <= x.PMF(k)*(1+1e-12) {
				minlike += x.PMF(j)
			}
			if least(j) <= least(k)*(1+1e-12) {
				blaker += x.PMF(j)
			}
		}
		if got := x.TwoSided(k, exact.MinLike); !near(got, minlike, 1e-12) {
			t.Fatalf("%+v, %d: minlike %v, by enumeration %v", x, k, got, minlike)
		}
		if got := x.TwoSided(k, exact.Blaker); !near(got, blaker, 1e-12) {
			t.Fatalf("%+v, %d: Blaker %v, by enumeration %v", x, k, got, blaker)
		}
		if got := x.TwoSided(k, exact.Central); !near(got, math.Min(1, 2*least(k)), 1e-14) {
			t.Fatalf("%+v, %d: central %v", x, k, got)
		}
	})
}

// Blaker's and the minimum-likelihood bounds are the ends of the set that the p-value accepts.
func TestAcceptanceBounds(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		how := rapid.SampledFrom([]exact.Sides{exact.MinLike, exact.Blaker}).Draw(t, "how")
		alpha := logUniform(t, "alpha", 1e-6, 0.5)
		n := rapid.Int64Range(1, 200).Draw(t, "n")
		k := rapid.Int64Range(0, n).Draw(t, "k")
		l, u := exact.ChanceBounds(k, n, alpha, how)
		p := func(v float64) float64 { return exact.NewBinomial(n, v).TwoSided(k, how) }
		for range 40 {
			f := rapid.Float64Range(0, 1).Draw(t, "f")
			if v := l * f * (1 - 1e-9); v > 0 && p(v) > alpha*(1+1e-9) {
				t.Fatalf("%d of %d, %v, alpha %g: %v is under the lower bound %v but has p = %v", k, n, how, alpha, v, l, p(v))
			}
			if v := u + (1-u)*f*(1+1e-9); v < 1 && v > u*(1+1e-9) && p(v) > alpha*(1+1e-9) {
				t.Fatalf("%d of %d, %v, alpha %g: %v is over the upper bound %v but has p = %v", k, n, how, alpha, v, u, p(v))
			}
		}
		if v := l + 1e-7*(1-l); k > 0 && p(v) <= alpha*(1-1e-4) && p(l*(1+1e-12)) <= alpha*(1-1e-4) {
			t.Fatalf("%d of %d, %v, alpha %g: just over the lower bound %v p is %v", k, n, how, alpha, l, p(v))
		}
		if how == exact.Blaker {
			if cl, cu := exact.ClopperPearson(k, n, alpha); l < cl*(1-1e-12) || u > cu*(1+1e-12) {
				t.Fatalf("%d of %d, alpha %g: Blaker %v %v not within %v %v", k, n, alpha, l, u, cl, cu)
			}
		}
	})
}

func TestPlansReachTheirPower(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		limit, power := logUniform(t, "limit", 1e-6, 0.3), rapid.Float64Range(0.5, 0.99).Draw(t, "power")
		ratio := rapid.SampledFrom([]float64{0.1, 0.5, 1.5, 2, 5}).Draw(t, "ratio")
		plan, ok := exact.NeededExposure(0.3, ratio, limit, power)
		if !ok {
			t.Fatalf("ratio %v limit %v power %v: no plan", ratio, limit, power)
		}
		for _, e := range []float64{plan.Least * (1 + 1e-12), plan.Most * (1 - 1e-12)} {
			x := exact.Poisson{Rate: 0.3, Exposure: e}
			got, _, _ := x.PowerUpper(limit, ratio)
			if ratio < 1 {
				got, _, _ = x.PowerLower(limit, ratio)
			}
			if plan.Most > plan.Least*(1+1e-11) && got < power*(1-1e-10) {
				t.Fatalf("%+v at %v: power %v, wanted %v", plan, e, got, power)
			}
		}
		p1 := math.Min(0.1*ratio, 0.9)
		trials, ok := exact.NeededTrials(0.1, p1, limit, power)
		if !ok {
			t.Fatalf("p1 %v: no plan", p1)
		}
		short := exact.NewBinomial(int64(trials.Least)-1, 0.1)
		full := exact.NewBinomial(int64(trials.Least), 0.1)
		do := exact.Binomial.PowerUpper
		if ratio < 1 {
			do = exact.Binomial.PowerLower
		}
		if got, k, _ := do(full, limit, p1); got < power*(1-1e-12) || k != trials.Count {
			t.Fatalf("%+v: power %v with %d", trials, got, k)
		}
		if got, _, _ := do(short, limit, p1); trials.Least > 1 && got >= power*(1+1e-12) {
			t.Fatalf("%+v: one trial less has power %v", trials, got)
		}
	})
}

func TestPoissonBinomialOfEqualChances(t *testing.T) {
	p := make([]float64, 400)
	for i := range p {
		p[i] = 0.013
	}
	x, err := exact.NewPoissonBinomial(p)
	if err != nil {
		t.Fatal(err)
	}
	b := exact.NewBinomial(400, 0.013)
	for k := int64(0); k <= 400; k++ {
		for _, c := range [][2]float64{
			{x.LogUpper(k), b.LogUpper(k)},
			{x.LogLower(k), b.LogLower(k)},
			{x.LogPMF(k), b.LogPMF(k)},
			{x.LogMidUpper(k), b.LogMidUpper(k)},
			{x.LogMidLower(k), b.LogMidLower(k)},
		} {
			if !near(c[0], c[1], 1e-12) {
				t.Fatalf("k = %d: %v, binomial %v", k, c[0], c[1])
			}
		}
	}
	if _, err := exact.NewPoissonBinomial([]float64{0.5, math.NaN()}); err == nil {
		t.Error("NaN taken")
	}
}
