package exact_test

import (
	"math"
	"testing"

	"tailbell/exact"
)

// The fuzz targets call every exported function with anything at all: no panic, no hang, NaN only
// outside the domain, probabilities in [0, 1], logs that never give up on a positive tail.

type law interface {
	discrete
	TwoSided(k int64, how exact.Sides) float64
	LogTwoSided(k int64, how exact.Sides) float64
}

func try(t *testing.T, x law, valid bool, k int64, limit float64, how exact.Sides) {
	t.Helper()
	for name, p := range map[string]float64{
		"PMF": x.PMF(k), "Upper": x.Upper(k), "Lower": x.Lower(k), "MidUpper": x.MidUpper(k), "MidLower": x.MidLower(k),
		"TwoSided": x.TwoSided(k, how),
	} {
		if valid == math.IsNaN(p) || p < 0 || p > 1 {
			t.Errorf("%+v.%s(%d) = %v (valid %v)", x, name, k, p, valid)
		}
	}
	for name, p := range map[string]float64{
		"LogPMF": x.LogPMF(k), "LogUpper": x.LogUpper(k), "LogLower": x.LogLower(k), "LogMidUpper": x.LogMidUpper(k),
		"LogMidLower": x.LogMidLower(k), "LogTwoSided": x.LogTwoSided(k, how),
	} {
		if valid == math.IsNaN(p) || p > 0 || valid && math.IsInf(p, -1) && x.PMF(k) > 0 {
			t.Errorf("%+v.%s(%d) = %v (valid %v)", x, name, k, p, valid)
		}
	}
	if _, size, ok := x.CriticalUpper(limit); ok && (!valid || !(size >= 0 && size <= limit*(1+1e-14))) {
		t.Errorf("%+v.CriticalUpper(%v): size %v", x, limit, size)
	}
	if _, size, ok := x.CriticalLower(limit); ok && (!valid || !(size >= 0 && size <= limit*(1+1e-14))) {
		t.Errorf("%+v.CriticalLower(%v): size %v", x, limit, size)
	}
}

func finite(v ...float64) bool {
	for _, x := range v {
		if math.IsNaN(x) || math.IsInf(x, 0) {
			return false
		}
	}
	return true
}

func FuzzPoisson(f *testing.F) {
	f.Add(1.5, 2.0, int64(4), 0.01, 2.0)
	f.Add(1e9, 1.0, int64(1000100000), 1e-300, 0.0)
	f.Add(5e-324, 1.0, int64(1), 1e-9, 1.0)
	f.Add(0.0, 3.0, int64(0), 0.5, 1.0)
	f.Fuzz(func(t *testing.T, rate, exposure float64, k int64, limit, ratio float64) {
		x := exact.Poisson{Rate: rate, Exposure: exposure}
		valid := rate >= 0 && exposure >= 0 && rate*exposure <= 1e300 && k <= 1<<53
		try(t, x, valid, k, limit, exact.Sides(uint64(k)%3))
		if p, _, ok := x.PowerUpper(limit, ratio); ok && finite(ratio) && ratio >= 0 && valid && rate*exposure*ratio < 1e300 && !(p >= 0 && p <= 1) {
			t.Errorf("%+v.PowerUpper(%v, %v) = %v", x, limit, ratio, p)
		}
		if p, _, ok := x.PowerLower(limit, ratio); ok && finite(ratio) && ratio >= 0 && valid && rate*exposure*ratio < 1e300 && !(p >= 0 && p <= 1) {
			t.Errorf("%+v.PowerLower(%v, %v) = %v", x, limit, ratio, p)
		}
		x.RateBounds(k, limit)
		x.RatioBounds(k, limit)
	})
}

func FuzzBinomial(f *testing.F) {
	f.Add(int64(20), 0.1, int64(4), 0.01, 0.3)
	f.Add(int64(1e12), 1e-9, int64(1100), 1e-100, 0.3)
	f.Add(int64(5), 1.0, int64(5), 0.5, 0.0)
	f.Fuzz(func(t *testing.T, n int64, p float64, k int64, limit, p1 float64) {
		valid := n >= 0 && n <= 1<<53 && p >= 0 && p <= 1
		for _, x := range []exact.Binomial{exact.NewBinomial(n, p), {N: n, P: 1 - p, Q: p}} {
			try(t, x, valid && k <= 1<<53, k, limit, exact.Sides(uint64(k)%3))
			x.PowerUpper(limit, p1)
			x.PowerLower(limit, p1)
			x.RatioBounds(k, limit)
		}
	})
}

func FuzzUrns(f *testing.F) {
	f.Add(int64(5), int64(6), int64(4), 2.5, int64(3), 0.05)
	f.Add(int64(1e6), int64(1e6), int64(1e6), 1e-300, int64(3), 0.05)
	f.Fuzz(func(t *testing.T, white, black, draws int64, odds float64, k int64, limit float64) {
		if white > 1e7 || black > 1e7 { // larger ones are slow, not different
			return
		}
		valid := white >= 0 && black >= 0 && draws >= 0 && draws <= white+black && k <= 1<<53
		how := exact.Sides(uint64(k) % 3)
		try(t, exact.Hypergeometric{White: white, Black: black, Draws: draws}, valid, k, limit, how)
		x := exact.FisherNoncentral{White: white, Black: black, Draws: draws, Odds: odds}
		try(t, x, valid && odds > 0 && finite(odds), k, limit, how)
		if m := x.Mean(); valid && odds > 0 && finite(odds) && math.IsNaN(m) {
			t.Errorf("%+v.Mean() = %v", x, m)
		}
	})
}

func FuzzNegativeBinomial(f *testing.F) {
	f.Add(1.5, 2.0, 0.3, int64(4), 0.01)
	f.Add(1e9, 1.0, 1e-3, int64(1e9), 1e-30)
	f.Fuzz(func(t *testing.T, rate, exposure, size float64, k int64, limit float64) {
		x := exact.NegativeBinomial{Rate: rate, Exposure: exposure, Size: size}
		if rate*exposure > 1e15 || size < 1e-12 || k > 1e15 {
			return
		}
		valid := rate >= 0 && exposure >= 0 && finite(rate, exposure) && size > 0 && size <= 1e15
		try(t, x, valid, k, limit, exact.Sides(uint64(k)%3))
		try(t, exact.NewNegativeBinomial(1+math.Abs(math.Mod(rate, 1e6)), 1, 1.01+math.Abs(math.Mod(size, 1e6))), finite(rate, size) && k <= 1<<53, k, limit, exact.Central)
	})
}

func FuzzMixtures(f *testing.F) {
	f.Add(int64(20), 0.5, 2.0, int64(4), 0.01)
	f.Fuzz(func(t *testing.T, n int64, a, b float64, k int64, limit float64) {
		if n > 2000 {
			n %= 2000
		}
		valid := n >= 0 && a > 0 && b > 0 && a <= 1e15 && b <= 1e15
		if a < 1e-12 || b < 1e-12 {
			return
		}
		try(t, exact.BetaBinomial{N: n, A: a, B: b}, valid && k <= 1<<53, k, limit, exact.Central)
		p := make([]float64, max(0, n%50))
		for i := range p {
			p[i] = math.Abs(math.Mod(a*float64(i+1), 1))
		}
		x, err := exact.NewPoissonBinomial(p)
		if err != nil {
			if finite(a) {
				t.Error(err)
			}
			return
		}
		try(t, x, k <= 1<<53, k, limit, exact.Sides(uint64(k)%3))
	})
}

func FuzzTwoSamples(f *testing.F) {
	f.Add(int64(21), int64(11), 800.0, 3011.0, 1.0, 0.05)
	f.Add(int64(0), int64(0), 1.0, 1.0, 0.0, 1e-300)
	f.Fuzz(func(t *testing.T, m, n int64, e, r, margin, alpha float64) {
		type test interface {
			Upper(int64) float64
			LogUpper(int64) float64
			Lower(int64) float64
			LogLower(int64) float64
			MidUpper(int64) float64
			LogMidUpper(int64) float64
			MidLower(int64) float64
			LogMidLower(int64) float64
			TwoSided(int64, exact.Sides) float64
			LogTwoSided(int64, exact.Sides) float64
			CriticalUpper(float64) (int64, float64, bool)
			CriticalLower(float64) (int64, float64, bool)
		}
		a := exact.TwoRate{RefEvents: m, Exposure: e, RefExposure: r, Margin: margin}
		b := exact.TwoProportion{RefEvents: m % 5000, RefTrials: 5000, Trials: 3000, Margin: margin}
		for _, x := range []test{a, b} {
			for _, p := range []float64{x.Upper(n), x.Lower(n), x.MidUpper(n), x.MidLower(n), x.TwoSided(n, exact.Sides(uint64(n)%3))} {
				if p < 0 || p > 1 {
					t.Errorf("%+v at %d: %v", x, n, p)
				}
			}
			for _, p := range []float64{x.LogUpper(n), x.LogLower(n), x.LogMidUpper(n), x.LogMidLower(n), x.LogTwoSided(n, exact.Sides(uint64(n)%3))} {
				if p > 0 {
					t.Errorf("%+v at %d: log %v", x, n, p)
				}
			}
			if _, size, ok := x.CriticalUpper(alpha); ok && !(size >= 0 && size <= alpha*(1+1e-14)) {
				t.Errorf("%+v.CriticalUpper(%v): size %v", x, alpha, size)
			}
			if _, size, ok := x.CriticalLower(alpha); ok && !(size >= 0 && size <= alpha*(1+1e-14)) {
				t.Errorf("%+v.CriticalLower(%v): size %v", x, alpha, size)
			}
		}
		for _, g := range []func() (float64, float64){
			func() (float64, float64) { return a.RatioBounds(n, alpha) },
			func() (float64, float64) { return a.RatioBoundsMid(n, alpha) },
			func() (float64, float64) { return b.OddsRatioBounds(n, alpha) },
			func() (float64, float64) { return b.OddsRatioBoundsMid(n, alpha) },
		} {
			if l, u := g(); l > u*(1+1e-14) || l < 0 {
				t.Errorf("%+v, %+v at %d, alpha %v: bounds %v %v", a, b, n, alpha, l, u)
			}
		}
		if alpha > 1e-12 && alpha < 1 && n >= 0 && n <= 100 && m <= 1e6 {
			for _, how := range []exact.Sides{exact.MinLike, exact.Blaker} {
				if l, u := b.OddsRatioBoundsBy(n%20, max(alpha, 1e-3), how); l > u*(1+1e-14) {
					t.Errorf("%+v at %d, %v: bounds %v %v", b, n%20, how, l, u)
				}
				if l, u := a.RatioBoundsBy(n, alpha, how); l > u*(1+1e-14) {
					t.Errorf("%+v at %d, %v: bounds %v %v", a, n, how, l, u)
				}
			}
		}
	})
}

func FuzzBounds(f *testing.F) {
	f.Add(int64(3), int64(10), 0.05)
	f.Add(int64(0), int64(1), 1e-300)
	f.Add(int64(1e9), int64(1e12), 1e-30)
	f.Add(int64(7), int64(7), 1.0)
	f.Fuzz(func(t *testing.T, k, n int64, alpha float64) {
		ok := alpha > 0 && alpha <= 1 && k >= 0 && k <= 1<<53
		for i, g := range []func(int64, float64) (float64, float64){exact.Garwood, exact.GarwoodMid} {
			if l, u := g(k, alpha); ok != (l >= 0 && u*(1+1e-14) >= l) {
				t.Errorf("mean %d of %d, alpha %v: %v %v", i, k, alpha, l, u)
			}
		}
		ok = ok && n >= 1 && n <= 1<<53 && k <= n
		for i, g := range []func(x, n int64, alpha float64) (float64, float64){exact.ClopperPearson, exact.ClopperPearsonMid} {
			if l, u := g(k, n, alpha); ok != (l >= 0 && u*(1+1e-14) >= l && u <= 1) {
				t.Errorf("chance %d, %d of %d, alpha %v: %v %v", i, k, n, alpha, l, u)
			}
		}
		if l, u := exact.TrialWaitBounds(k, n, alpha); (ok && k > 0) != (l >= 0 && u*(1+1e-14) >= l && u <= 1) {
			t.Errorf("trials %d of %d, alpha %v: %v %v", k, n, alpha, l, u)
		}
		exact.WaitBounds(k, float64(n), alpha)
		one := k >= 0 && k <= 1<<53 && alpha > 0 && alpha < 1
		if l, u := exact.MeanLower(k, alpha), exact.MeanUpper(k, alpha); one != (l >= 0 && u >= 0) {
			t.Errorf("one-sided mean of %d, alpha %v: %v %v", k, alpha, l, u)
		}
		one = one && n >= 1 && n <= 1<<53 && k <= n
		if l, u := exact.ChanceLower(k, n, alpha), exact.ChanceUpper(k, n, alpha); one != (l >= 0 && u >= 0 && l <= 1 && u <= 1) {
			t.Errorf("one-sided chance, %d of %d, alpha %v: %v %v", k, n, alpha, l, u)
		}
		for _, how := range []exact.Sides{exact.MinLike, exact.Blaker} {
			if l, u := exact.MeanBounds(k, alpha, how); ok && alpha > 1e-200 && !(l >= 0 && u*(1+1e-14) >= l) {
				t.Errorf("mean %v of %d, alpha %v: %v %v", how, k, alpha, l, u)
			}
			if l, u := exact.ChanceBounds(k, n, alpha, how); ok && alpha > 1e-200 && !(l >= 0 && u*(1+1e-14) >= l && u <= 1) {
				t.Errorf("chance %v, %d of %d, alpha %v: %v %v", how, k, n, alpha, l, u)
			}
		}
	})
}

func FuzzWaits(f *testing.F) {
	f.Add(int64(3), 0.2, 4.5, 0.01)
	f.Fuzz(func(t *testing.T, events int64, rate, at, limit float64) {
		w := exact.Wait{Events: events, Rate: rate}
		for _, p := range []float64{w.Within(at), w.Beyond(at)} {
			if p < 0 || p > 1 {
				t.Errorf("%+v at %v: %v", w, at, p)
			}
		}
		if w.LogWithin(at) > 0 || w.LogBeyond(at) > 0 || w.Early(limit) < 0 || w.Late(limit) < 0 {
			t.Errorf("%+v at %v, %v", w, at, limit)
		}
		x := exact.TrialWait{Events: events, P: rate, Q: 1 - rate}
		n := int64(min(max(at, -10), 1e15))
		for _, p := range []float64{x.Within(n), x.Beyond(n), x.PMF(n)} {
			if p < 0 || p > 1 {
				t.Errorf("%+v at %v: %v", x, n, p)
			}
		}
		if x.LogWithin(n) > 0 || x.LogBeyond(n) > 0 || x.LogPMF(n) > 0 {
			t.Errorf("%+v at %v", x, n)
		}
		x.Early(limit)
		x.Late(limit)
	})
}

func FuzzPlans(f *testing.F) {
	f.Add(0.2, 2.0, 0.01, 0.8)
	f.Fuzz(func(t *testing.T, rate, ratio, limit, power float64) {
		if p, ok := exact.NeededExposure(rate, ratio, limit, power); ok && !(p.Least <= p.Most) {
			t.Errorf("%v %v %v %v: %+v", rate, ratio, limit, power, p)
		}
		if math.Abs(ratio-1) > 0.05 && limit > 1e-6 {
			if p, ok := exact.NeededTrials(rate, rate*ratio, limit, power); ok && !(p.Least >= 1 && p.Least <= p.Most) {
				t.Errorf("%v %v %v %v: %+v", rate, ratio, limit, power, p)
			}
		}
	})
}

func FuzzMultiplicity(f *testing.F) {
	f.Add([]byte{10, 200, 3, 255})
	f.Fuzz(func(t *testing.T, raw []byte) {
		p := make([]float64, len(raw))
		for i, b := range raw {
			if p[i] = float64(b) / 254; b == 255 {
				p[i] = math.NaN()
			}
		}
		holm, bh := exact.Holm(nil, p), exact.BenjaminiHochberg(nil, p)
		hochberg, by := exact.Hochberg(nil, p), exact.BenjaminiYekutieli(nil, p)
		for i, v := range p {
			if math.IsNaN(v) != math.IsNaN(holm[i]) || holm[i] < v || bh[i] < v || holm[i] > 1 || bh[i] > holm[i]*(1+1e-15) {
				t.Errorf("%v: %v, %v", v, holm[i], bh[i])
			}
			if hochberg[i] > holm[i] || hochberg[i] < v || bh[i] > hochberg[i]*(1+1e-15) || by[i] < bh[i] || by[i] > 1 {
				t.Errorf("%v: Holm %v, Hochberg %v, BH %v, BY %v", v, holm[i], hochberg[i], bh[i], by[i])
			}
		}
		// of those selected, and of no others, p lies at or under the alpha of their bounds
		n, alpha := exact.FalseCoverage(bh, 0.2)
		for i, v := range p {
			if selected := exact.AtMost(bh[i], 0.2); selected && n == 0 || n > 0 && selected != exact.AtMost(v, alpha) {
				t.Errorf("%v: %d selected, alpha %v, %v adjusted to %v", p, n, alpha, v, bh[i])
			}
		}
	})
}

func FuzzParseSides(f *testing.F) {
	f.Add("central")
	f.Fuzz(func(t *testing.T, s string) {
		if v, err := exact.ParseSides(s); err == nil && v.String() != s {
			t.Errorf("%q read as %v", s, v)
		}
	})
}
