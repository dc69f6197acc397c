package exact

import "math"

// acceptance finds the ends of the set of parameters whose two-sided p-value exceeds alpha, for
// the forms that are not central. As the parameter moves outward from the estimate, the far tail
// jumps whenever another count joins it; between two jumps the p-value falls and then rises, so
// its largest value is at an end of the stretch. The search walks inward over the stretches from
// where no p-value can exceed alpha, and stops at the first that does: the bound is a jump, or
// a crossing solved for within a stretch. The set may have gaps; the bounds are its hull.
type acceptance[L law] struct {
	at    func(eta float64) L // eta: log mean, or log odds; the tail at k grows with eta
	k     int64
	alpha float64
	how   Sides
	lower bool // the lower bound: own tail P(X >= k)
}

// joined is how far (in logs) count j is from counting as extreme at eta: <= 0 counts.
func (a acceptance[L]) joined(eta float64, j int64) float64 {
	x := a.at(eta)
	if a.how == MinLike {
		return logRatio(x, j, a.k)
	}
	return x.side(j, !a.lower, false).logProb() - x.side(a.k, a.lower, false).logProb()
}

// logRatio is log(P(X = j)/P(X = k)), without the sum over all counts where the law can do without.
func logRatio[L law](x L, j, k int64) float64 {
	if u, ok := any(x).(FisherNoncentral); ok && x.valid() {
		return u.urn().logRatio(float64(j), float64(k))
	}
	return x.point(j).minus(x.point(k))
}

func (a acceptance[L]) excess(eta float64, j int64) float64 {
	x := a.at(eta)
	own := x.side(a.k, a.lower, false).prob()
	return own + within(x, j, !a.lower).prob() - a.alpha
}

// from is the eta to start at, given where the own tail is a wanted size. Blaker's p-value is at
// most twice the own tail; the other form's is under alpha further out wherever it is so by more
// than a few jumps.
func (a acceptance[L]) from(tailAt func(size float64) float64) float64 {
	if a.how == Blaker {
		return tailAt(a.alpha / 2)
	}
	for _, f := range [...]float64{0.4999, 0.499, 0.49, 0.34, 0.24, 0.17, 0.12, 0.08} { // a few jumps may be few in a million
		eta := tailAt(a.alpha * f)
		if a.excess(eta, a.outermost(eta))+3*a.at(eta).point(a.k).value() < 0 {
			return eta
		}
	}
	return tailAt(a.alpha / 20)
}

// bound walks from eta in steps of about scale.
func (a acceptance[L]) bound(eta, scale float64) float64 {
	in := 1.0 // direction of the walk, and of the counts that join
	if !a.lower {
		in, scale = -1, -scale
	}
	j := a.outermost(eta)
	for range 100000 {
		next := j + int64(in)
		if next == a.k { // every count is in: p is 1 from here on
			break
		}
		end := a.solve(eta, scale, func(e float64) float64 { return -a.joined(e, next) })
		if math.IsNaN(end) {
			return end
		}
		if a.excess(end, j) > 0 {
			return bracketed(eta, end, func(e float64) float64 { return a.excess(e, j) })
		}
		if a.excess(end, next) > 0 {
			return end
		}
		eta, j = end, next
	}
	return a.solve(eta, scale, func(e float64) float64 { return a.excess(e, j) })
}

// outermost is the most inward count that is joined at eta, one past the support if none is.
func (a acceptance[L]) outermost(eta float64) int64 {
	x := a.at(eta)
	lo, hi := x.support()
	out := lo - 1 // holds by definition
	if !a.lower {
		out = hi + 1
	}
	mean, _ := x.spread()
	return outward(a.k, out, 2*mean-float64(a.k), func(j int64) bool { return a.joined(eta, j) <= 0 })
}

// solve finds the zero of f, negative (or 0) at eta, by walking in growing steps.
func (a acceptance[L]) solve(eta, step float64, f func(float64) float64) float64 {
	for range 200 {
		end := eta + step
		if f(end) > 0 {
			return bracketed(eta, end, f)
		}
		eta, step = end, 2*step
		if math.Abs(eta) > 745 && eta*step > 0 { // outward of all that exp can give
			break
		}
	}
	return math.NaN()
}

// bracketed solves f = 0 with f(a) <= 0 < f(b) by Chandrupatla's method (1997, Advances in
// Engineering Software 28), and returns the end where f > 0.
func bracketed(a, b float64, f func(float64) float64) float64 {
	fa, fb := f(a), f(b)
	if fa > 0 {
		return a
	}
	a, b, fa, fb = b, a, fb, fa
	t := 0.5
	for range 200 {
		x := a + t*(b-a)
		fx := f(x)
		c, fc := a, fa
		if (fx > 0) != (fa > 0) {
			c, b, fc, fb = b, a, fb, fa
		}
		a, fa = x, fx
		small := 1e-16 * math.Abs(a)
		if fx == 0 {
			return a
		}
		if math.Abs(b-a) <= 4*small+1e-300 {
			break
		}
		xi, phi := (a-b)/(c-b), (fa-fb)/(fc-fb)
		t = 0.5
		if phi*phi < xi && (1-phi)*(1-phi) < 1-xi {
			t = fa/(fb-fa)*(fc/(fb-fc)) + (c-a)/(b-a)*(fa/(fc-fa))*(fb/(fc-fb))
		}
		edge := 2 * small / math.Abs(b-a)
		t = min(1-edge, max(edge, t))
	}
	if fa > 0 || fb <= 0 {
		return a
	}
	return b
}

// poissonAt and binomialAt are the families by log mean and by log odds.
func poissonAt(eta float64) Poisson { return Poisson{expTwo(eta, 0), 1} }

func binomialAt(n int64) func(float64) Binomial {
	return func(eta float64) Binomial {
		p, q := chancesOf(eta)
		return Binomial{n, p, q}
	}
}

// chancesOf are p and 1-p at log odds eta.
func chancesOf(eta float64) (p, q float64) {
	if eta > 0 {
		q, p = chancesOf(-eta)
		return p, q
	}
	e := expTwo(eta, 0)
	return e / (1 + e), 1 / (1 + e)
}

// MeanBounds are two-sided bounds at level 1-alpha of a Poisson mean for n events: the ends of
// the set of means whose two-sided p-value of the given form exceeds alpha. Central gives Garwood's.
// Blaker's lie within Garwood's at the same alpha (Blaker 2000, Canadian Journal of Statistics 28);
// a set with gaps is given by its ends. NaN outside the domain of Garwood.
func MeanBounds(n int64, alpha float64, how Sides) (lower, upper float64) {
	lower, upper = Garwood(n, alpha)
	if how == Central || math.IsNaN(upper) {
		return lower, upper
	}
	if alpha == 1 {
		return float64(n), float64(n)
	}
	scale := 1 / (1 + math.Sqrt(float64(n)))
	a := acceptance[Poisson]{at: poissonAt, k: n, alpha: alpha, how: how, lower: true}
	tailAt := func(size float64) float64 { return logOf(poissonBound(float64(n), size, a.lower, false)) }
	if n > 0 {
		lower = expTwo(a.bound(a.from(tailAt), scale), 0)
	}
	a.lower = false
	return lower, expTwo(a.bound(a.from(tailAt), scale), 0)
}

// ChanceBounds are two-sided bounds at level 1-alpha of the probability behind x events in n
// trials, of the given form; Central gives Clopper and Pearson's. NaN outside their domain.
func ChanceBounds(x, n int64, alpha float64, how Sides) (lower, upper float64) {
	lower, upper = ClopperPearson(x, n, alpha)
	if how == Central || math.IsNaN(upper) {
		return lower, upper
	}
	l, u := oddsAccepted(x, n, alpha, how)
	lower, _ = chancesOf(l)
	upper, _ = chancesOf(u)
	return lower, upper
}

// oddsAccepted are the bounds of the log odds.
func oddsAccepted(x, n int64, alpha float64, how Sides) (lower, upper float64) {
	lower, upper = math.Inf(-1), math.Inf(1)
	a := acceptance[Binomial]{at: binomialAt(n), k: x, alpha: min(alpha, 1-0x1p-50), how: how, lower: true}
	scale := 1 / (1 + math.Sqrt(float64(min(x, n-x))))
	tailAt := func(size float64) float64 {
		if a.lower {
			p, q := binomialLower(x, n, size, false)
			return logOf(p / q)
		}
		q, p := binomialLower(n-x, n, size, false)
		return logOf(p / q)
	}
	if x > 0 {
		lower = a.bound(a.from(tailAt), scale)
	}
	if a.lower = false; x < n {
		upper = a.bound(a.from(tailAt), scale)
	}
	return lower, upper
}

// RatioBoundsBy is RatioBounds of the given two-sided form.
func (x TwoRate) RatioBoundsBy(n int64, alpha float64, how Sides) (lower, upper float64) {
	lower, upper = x.RatioBounds(n, alpha)
	if how == Central || math.IsNaN(upper) {
		return lower, upper
	}
	l, u := oddsAccepted(n, n+x.RefEvents, alpha, how)
	r := x.RefExposure / x.Exposure
	return expTwo(l, 0) * r, expTwo(u, 0) * r
}

// OddsRatioBoundsBy is OddsRatioBounds of the given two-sided form.
func (x TwoProportion) OddsRatioBoundsBy(n int64, alpha float64, how Sides) (lower, upper float64) {
	lower, upper = x.OddsRatioBounds(n, alpha)
	if how == Central || math.IsNaN(upper) {
		return lower, upper
	}
	at := func(eta float64) FisherNoncentral {
		return FisherNoncentral{x.Trials, x.RefTrials, n + x.RefEvents, expTwo(eta, 0)}
	}
	lo, hi := at(0).support()
	a := acceptance[FisherNoncentral]{at: at, k: n, alpha: min(alpha, 1-0x1p-50), how: how, lower: true}
	tailAt := func(size float64) float64 {
		u := at(0).urn()
		if a.lower {
			return logOf(u.lowerOdds(float64(n), size, false))
		}
		return -logOf(u.mirror().lowerOdds(float64(x.RefEvents), size, false))
	}
	if n > lo {
		lower = expTwo(a.bound(a.from(tailAt), 0.1), 0)
	}
	if a.lower = false; n < hi {
		upper = expTwo(a.bound(a.from(tailAt), 0.1), 0)
	}
	return lower, upper
}

// part is a lower bound divided by what it is a bound of: 0 stays 0.
func part(lower, whole float64) float64 {
	if lower == 0 {
		return 0
	}
	return lower / whole
}

// RateBounds are Garwood's bounds at level 1-alpha of the rate for n events in Exposure; without
// exposure, events leave no rate finite and no events leave them all.
func (x Poisson) RateBounds(n int64, alpha float64) (lower, upper float64) {
	if !x.valid() {
		return math.NaN(), math.NaN()
	}
	l, u := Garwood(n, alpha)
	return part(l, x.Exposure), u / x.Exposure
}

// RatioBounds are Garwood's bounds at level 1-alpha of the ratio of the rate behind n events in
// Exposure to Rate.
func (x Poisson) RatioBounds(n int64, alpha float64) (lower, upper float64) {
	if !x.valid() {
		return math.NaN(), math.NaN()
	}
	l, u := Garwood(n, alpha)
	return part(l, x.Mean()), u / x.Mean()
}

// RatioBounds are Clopper and Pearson's bounds at level 1-alpha of the ratio of the probability
// behind k events in N trials to P.
func (x Binomial) RatioBounds(k int64, alpha float64) (lower, upper float64) {
	if !x.valid() {
		return math.NaN(), math.NaN()
	}
	l, u := ClopperPearson(k, x.N, alpha)
	return part(l, x.P), u / x.P
}
