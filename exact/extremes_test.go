package exact

import (
	"math"
	"testing"
)

// The values of this file were computed with 66 to 90 digits (MPFR 4.2 by gmpy2 2.1, log-gamma
// forms and plain recursions) for the float64 inputs as they stand, and rounded.

// TestArrivalCrossingsOfManyMessages: the chance of no message underflows where some 745 are expected.
func TestArrivalCrossingsOfManyMessages(t *testing.T) {
	for _, v := range []struct {
		rates []float64
		span  float64
		k     int64
		want  float64
	}{
		{[]float64{500, 250}, 1, 1020, 9.0732199848230959},
		{[]float64{1000, 1000}, 1, 3000, 16.925518269360726},
		{[]float64{300, 300}, 1, 900, 9.2702719497133845},
		{[]float64{400, 300, 100}, 1, 1400, 1.5060088369637772},
		{[]float64{0.3, 0.1}, 2000, 1100, 0.00017502125966663455},
		{[]float64{0.3, 0.1}, 2000, 700, 6.9789145624501799e-19},
		{[]float64{350, 0.5}, 2, 690, 4.720454581148002},
		{[]float64{1000, 0}, 1, 1020, 10.444535035286092},
	} {
		if got := ArrivalCrossings(v.rates, v.span, v.k); !(math.Abs(got/v.want-1) < 1e-12) {
			t.Errorf("ArrivalCrossings(%v, %v, %d) = %v, want %v", v.rates, v.span, v.k, got, v.want)
		}
	}
}

// TestLogMassNextToCertain: what is left of a count that nearly always comes.
func TestLogMassNextToCertain(t *testing.T) {
	pb, err := NewPoissonBinomial([]float64{6.920258177458742e-51})
	if err != nil {
		t.Fatal(err)
	}
	for _, v := range []struct {
		law interface{ LogPMF(k int64) float64 }
		k   int64
		log float64
	}{
		{FisherNoncentral{95, 3, 1, 1.3403413305087423e-24}, 0, -4.2444142132776839e-23},
		{BetaBinomial{3, 0.04482982303916434, 100175167.34395106}, 0, -1.3425429805681081e-09},
		{BetaBinomial{20, 727067829.9338024, 0.7846763566363891}, 20, -2.1584680648893073e-08},
		{Hypergeometric{3, 4398046511100, 2}, 0, -1.3642420526603229e-12},
		{pb, 0, -6.920258177458742e-51},
	} {
		if got := v.law.LogPMF(v.k); !(math.Abs(got/v.log-1) < 1e-14) {
			t.Errorf("%T %v: log P(X = %d) = %v, want %v", v.law, v.law, v.k, got, v.log)
		}
	}
}

// TestPoissonBinomialOfTinyChances: products of probabilities far under 2^-512.
func TestPoissonBinomialOfTinyChances(t *testing.T) {
	for _, v := range []struct {
		p   []float64
		log float64
	}{
		{[]float64{1e-300, 1e-300, 1e-300}, -2072.3265836946412},
		{[]float64{1e-250, 1e-250, 1e-250}, -1726.9388197455344},
		{[]float64{5e-324, 5e-324}, -1488.8801438427624},
		{[]float64{1e-300, 0.5, 1e-200}, -1151.9856936775827},
	} {
		x, err := NewPoissonBinomial(v.p)
		if err != nil {
			t.Fatal(err)
		}
		n := int64(len(v.p))
		for _, got := range []float64{x.LogPMF(n), x.LogUpper(n)} {
			if !(math.Abs(got/v.log-1) < 1e-15) {
				t.Errorf("%v: all events: log p = %v, want %v", v.p, got, v.log)
			}
		}
	}
}

// TestBoundsAtTinyAlpha: of one event, every two-sided form's lower bound is -log(1-alpha), or
// 1-(1-alpha)^(1/n), since nothing lies on the other side.
func TestBoundsAtTinyAlpha(t *testing.T) {
	for _, how := range []Sides{MinLike, Blaker} {
		for _, alpha := range []float64{1e-200, 1e-300} {
			if l, _ := MeanBounds(1, alpha, how); !(math.Abs(l/alpha-1) < 1e-12) {
				t.Errorf("mean, %v, alpha %v: %v", how, alpha, l)
			}
			if l, _ := ChanceBounds(1, 1000, alpha, how); !(math.Abs(l*1000/alpha-1) < 1e-12) {
				t.Errorf("chance, %v, alpha %v: %v", how, alpha, l)
			}
		}
	}
}

// TestBoundsWithoutInformation: nothing seen where nothing can be excluded.
func TestBoundsWithoutInformation(t *testing.T) {
	none := TwoRate{RefEvents: 0, Exposure: 5, RefExposure: 7}
	for name, pair := range map[string]func() (float64, float64){
		"ratio of two rates":        func() (float64, float64) { return none.RatioBounds(0, 0.05) },
		"mid-p ratio of two rates":  func() (float64, float64) { return none.RatioBoundsMid(0, 0.05) },
		"minlike ratio":             func() (float64, float64) { return none.RatioBoundsBy(0, 0.05, MinLike) },
		"Blaker's ratio":            func() (float64, float64) { return none.RatioBoundsBy(0, 0.05, Blaker) },
		"rate without exposure":     func() (float64, float64) { return Poisson{2, 0}.RateBounds(0, 0.05) },
		"ratio to nothing":          func() (float64, float64) { return Poisson{0, 2}.RatioBounds(0, 0.05) },
		"ratio to an impossibility": func() (float64, float64) { return NewBinomial(10, 0).RatioBounds(0, 0.05) },
	} {
		if l, u := pair(); l != 0 || !math.IsInf(u, 1) {
			t.Errorf("%s: %v to %v, want 0 to +Inf", name, l, u)
		}
	}
}

// TestNeededTrialsOneByOne: the least count that does is found as by going up one by one, and that
// none does is told without going up.
func TestNeededTrialsOneByOne(t *testing.T) {
	for _, v := range []struct{ p0, p1, limit, power float64 }{
		{0.01, 0.02, 0.01, 0.9},
		{0.9, 0.97, 0.01, 0.8},
		{0.3, 0.2, 0.001, 0.95},
		{0.02, 0.05, 1e-6, 0.5},
		{0.1, 0.2, 0.9, 0.1},
		{0.999, 0.99, 0.01, 0.9},
		{0.5, 0.6, 0.05, 0.9},
		{0.4, 0.9, 0.05, 0.2},
	} {
		got, ok := NeededTrials(v.p0, v.p1, v.limit, v.power)
		k := int64(0)
		for n := int64(1); ; n++ { // the least trials at which the look at limit has the power
			x := NewBinomial(n, v.p0)
			power, c, can := x.PowerUpper(v.limit, v.p1)
			if v.p1 < v.p0 {
				power, c, can = x.PowerLower(v.limit, v.p1)
			}
			if can && power >= v.power {
				k = c
				if !ok || got.Count != k || got.Least != float64(n) {
					t.Errorf("%v: %+v %v, one by one %d events in %d trials", v, got, ok, k, n)
				}
				break
			}
		}
	}
	if plan, ok := NeededTrials(1e-14, 2e-14, 0.01, 0.9); !ok || plan.Count != 30 {
		t.Errorf("rare events: %+v %v, want 30 as of a rate", plan, ok)
	}
	for _, v := range [][2]float64{{0.5, 0.501}, {0.5, 0.4999}, {0.01, 0.010001}} {
		if plan, ok := NeededTrials(v[0], v[1], 0.01, 0.9); ok {
			t.Errorf("%v: %+v", v, plan)
		}
	}
	if plan, ok := NeededExposure(1e-320, 2, 0.01, 0.9); ok {
		t.Errorf("an exposure past all numbers: %+v", plan)
	}
}

// TestOddsRatioBoundsOfManyTrials holds the minimum-likelihood bounds against their definition: just
// inside, p exceeds alpha; just outside it does not.
func TestOddsRatioBoundsOfManyTrials(t *testing.T) {
	x := TwoProportion{RefEvents: 500000, RefTrials: 1000000, Trials: 1000000}
	l, u := x.OddsRatioBoundsBy(500600, 0.05, MinLike)
	p := func(odds float64) float64 {
		x.Margin = odds
		return x.TwoSided(500600, MinLike)
	}
	const off = 1e-6
	if in, out := p(l*(1+off)), p(l*(1-off)); in <= 0.05 || out > 0.05 {
		t.Errorf("lower %v: p is %v inside, %v outside", l, in, out)
	}
	if in, out := p(u*(1-off)), p(u*(1+off)); in <= 0.05 || out > 0.05 {
		t.Errorf("upper %v: p is %v inside, %v outside", u, in, out)
	}
}
