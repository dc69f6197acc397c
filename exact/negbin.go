package exact

import "math"

// NegativeBinomial is the law of counts whose rate itself varies by a gamma law: mean
// Rate*Exposure, variance mean + mean^2/Size. It is the number of failures before the Size-th
// success, for real Size, with success probability Size/(Size+mean).
//
// Rate and Exposure are finite and not negative, Size positive and at most 1e15; else NaN.
type NegativeBinomial struct{ Rate, Exposure, Size float64 }

// NewNegativeBinomial is the law with variance spread times the mean, spread > 1.
func NewNegativeBinomial(rate, exposure, spread float64) NegativeBinomial {
	return NegativeBinomial{Rate: rate, Exposure: exposure, Size: float64(rate*exposure) / (spread - 1)}
}

func (x NegativeBinomial) valid() bool {
	return Poisson{x.Rate, x.Exposure}.valid() && x.Size > 0 && x.Size <= 1e15
}

func (x NegativeBinomial) mean() dd { return Poisson{x.Rate, x.Exposure}.mean() }

func (x NegativeBinomial) spread() (mean, sd float64) {
	m := x.mean().float()
	return m, math.Sqrt(m + m*(m/x.Size))
}

func (x NegativeBinomial) support() (lo, hi int64) { return 0, maxCount }

func (x NegativeBinomial) thin(int64, bool) float64 { return 1 }

func (x NegativeBinomial) point(k int64) point {
	mu := x.mean()
	switch {
	case !x.valid() || k > maxCount:
		return undefined.point
	case k < 0 || mu.hi == 0 && k > 0:
		return impossible.point
	case mu.hi == 0:
		return point{0, 0, 1}
	}
	return pascal{mu, x.Size}.point(float64(k))
}

func (x NegativeBinomial) side(k int64, upper, mid bool) side {
	if !x.valid() || k > maxCount {
		return undefined
	}
	mu := x.mean()
	if k < 0 || mu.hi == 0 && k > 0 {
		return outside(k < 0 == upper)
	}
	if mu.hi == 0 {
		return atOnly(mid)
	}
	return pascal{mu, x.Size}.side(float64(k), upper, mid)
}

// atOnly is the tail at the only possible count.
func atOnly(mid bool) side {
	if mid {
		return side{point{0, 0, 1}, 0.5, false}
	}
	return certain
}

// pascal is a negative binomial with its mean in double-double.
type pascal struct {
	mu dd
	a  float64 // size
}

// point is a/(k+a) (k+a)!/(k! a!) (a/(a+mu))^a (mu/(a+mu))^k in deviance form.
func (p pascal) point(k float64) point {
	t := p.mu.addFloat(p.a)
	if k == 0 {
		d := dd{p.a, 0}.div(t).log().mulFloat(p.a)
		if p.mu.hi < 1e-3*p.a { // a/(a+mu) next to 1
			d = log1pDD(p.mu.div(dd{p.a, 0})).mulFloat(-p.a)
		}
		return point{d.hi, d.lo, 1}
	}
	z := twoSum(k, p.a)
	// k log(k (a+mu)/((k+a) mu)) + a log((a+mu)/(k+a))
	d := dd{k, 0}.div(p.mu).mul(t.div(z)).log().mulFloat(k)
	e := t.div(z).log().mulFloat(p.a)
	w := d.add(e).neg().addFloat(stirlingReal(z) - stirling(k) - stirlingReal(dd{p.a, 0}))
	return point{w.hi, w.lo, math.Sqrt(p.a / (2 * math.Pi * k * z.hi))}
}

// log1pDD is log(1+a) for small a in double-double.
func log1pDD(a dd) dd {
	s := twoSum(1, a.hi)
	t := fastTwoSum(s.hi, s.lo+a.lo)
	return t.log()
}

func (p pascal) side(k float64, upper, mid bool) side {
	return splitTail(k, math.Inf(1), p.mu.hi, upper, mid, p.direct)
}

// splitTail takes the direct tail wherever it is under 1/2, else one minus the other: for a skew
// law the mean does not tell which. Counts run from 0 to top.
func splitTail(k, top, mean float64, upper, mid bool, direct func(k float64, upper, mid bool) side) side {
	out := upper && k > mean || !upper && k < mean // on the side of its own tail
	if out {
		s := direct(k, upper, mid)
		if s.prob() <= 0.5 {
			return s
		}
	}
	j := k
	if !mid {
		if upper {
			j--
		} else {
			j++
		}
	}
	if j < 0 || j > top {
		return certain
	}
	s := direct(j, !upper, mid)
	if !out && s.prob() > 0.5 {
		return direct(k, upper, mid)
	}
	s.flip = true
	return s
}

func (p pascal) direct(k float64, upper, mid bool) side {
	s := side{point: p.point(k)}
	switch {
	case !upper:
		s.ratio = p.lowerRatio(k)
	case k == 0: // only asked for with mid, where P(X > 0) is not near 1
		s = p.direct(1, true, false)
		half := p.point(0)
		half.root *= 0.5
		s.ratio += expTwo(half.minus(s.point), 0)
		return s
	default:
		s.ratio = p.upperRatio(k)
	}
	if mid {
		s.ratio -= 0.5
	}
	return s
}

// upperRatio is P(X >= k)/P(X = k), k >= 1: a sum, or the beta integral in y = log(1+v u),
// u = 1 - t/w, with v = mu/a:
//
//	k/(pi v) * integral over y from 0 to log(1+v) of exp(-c y - s (e^y-1-y) + (k-1) g(-u))
func (p pascal) upperRatio(k float64) float64 {
	t := p.mu.addFloat(p.a)
	w := p.mu.div(t)
	if k*reach(k-1-p.mu.hi, k*(1-w.hi)) < 1e5 { // worth a try
		sum, term, j := 1.0, 1.0, 0.0
		for ; j < 300 && term > 0x1p-56*sum; j++ {
			term *= float64((k+j+p.a)*w.hi) / (k + j + 1)
			sum += term
		}
		if r := (k + j + p.a) * w.hi / (k + j + 1); j < 300 && r < 0.9 {
			return sum
		}
	}
	v := p.mu.div(dd{p.a, 0})
	s := (k - 1) / v.hi
	c := dd{k - 1, 0}.add(p.mu.neg()).div(v).float()
	top := min(log1pOf(v.hi), expReach(c, s), reach(c, s+s/v.hi))
	h := func(y float64) float64 {
		e := expLess(y)
		u := min((e+y)/v.hi, 1)
		x := -c*y - s*e
		if k > 1 {
			x += (k - 1) * logLess1Far(-u)
		}
		return expTwo(x, 0)
	}
	return k * t.hi / (p.a * v.hi) * panels(h, 0, top, 1+int(top/2))
}

// lowerRatio is P(X <= k)/P(X = k): a sum, or the beta integral in s = -log(t/pi), r = a/mu:
//
//	(k+a) * integral over s >= 0 of exp(-(a-k r) s - k r (e^-s-1+s) + k g(r (1-e^-s)))
func (p pascal) lowerRatio(k float64) float64 {
	t := p.mu.addFloat(p.a)
	inv := t.div(p.mu).hi
	sum, term, j := 1.0, 1.0, k
	for ; j > 0 && j > k-300 && term > 0x1p-56*sum; j-- {
		term *= j * inv / (j - 1 + p.a)
		sum += term
	}
	if j == 0 || j > k-300 && j*inv < 0.9*(j-1+p.a) {
		return sum
	}
	r := dd{p.a, 0}.div(p.mu)
	c := r.mul(p.mu.addFloat(-k)).float()
	kr := k * r.hi
	h := func(s float64) float64 {
		f := expLess(-s)
		x := r.hi * (s - f)
		return expTwo(-c*s-kr*f+k*logLess1Far(x), 0)
	}
	const far = 40
	top := 1.2 * reach(c, kr+k*r.hi*r.hi)
	if !(top < 0.3) { // e^-s-1+s is no longer s*s/2: solve c s + kr (e^-s-1+s) = 38
		top = (38 + kr) / (c + kr)
		for range 4 {
			top -= (c*top + kr*expLess(-top) - 38) / (c - kr*expm1Of(-top))
		}
		top = min(far, 1.02*top)
	}
	q := panels(h, 0, top, 1+int(top/2))
	if top == far { // 1-e^-s is 1 by now
		q += expTwo(k*log1pOf(r.hi)-p.a*far, 0) / p.a
	}
	return (k + p.a) * q
}

// panels integrates h over [lo, hi] by n Gauss-Legendre panels.
func panels(h func(float64) float64, lo, hi float64, n int) float64 {
	w := (hi - lo) / float64(n)
	sum := 0.0
	for i := range n {
		for j := range gaussTable {
			sum += w * gaussTable[j][1] * h(lo+w*(float64(i)+gaussTable[j][0]))
		}
	}
	return sum
}

// logLess1Far is logLess1 for all x > -1; -Inf at -1.
func logLess1Far(x float64) float64 {
	if math.Abs(x) < 0.5 {
		return logLess1(x)
	}
	return log1pOf(x) - x
}

// expReach is the y at which exp(-c y - s (e^y-1-y)) has fallen below 2^-55.
func expReach(c, s float64) float64 {
	y := reach(c, s)
	if !(y < 1e3) {
		y = 1e3
	}
	for range 60 {
		if y < 0.5 {
			return y
		}
		f := c*y + s*(expTwo(min(y, 700), 0)-1-y) - 38
		if f < 0 {
			return y * 1.02
		}
		d := c + s*(expTwo(min(y, 700), 0)-1)
		step := f / d
		if !(d > 0) || step > y/2 {
			step = y / 2
		}
		y -= step
		if step < 1e-3*y {
			return y * 1.02
		}
	}
	return y
}

// PMF is P(X = k); 0 outside the support.
func (x NegativeBinomial) PMF(k int64) float64 { return x.point(k).value() }

// LogPMF is the natural logarithm of P(X = k), -Inf outside the support.
func (x NegativeBinomial) LogPMF(k int64) float64 { return logMassByEnds(x, k) }

// Upper is P(X >= k).
func (x NegativeBinomial) Upper(k int64) float64 { return x.side(k, true, false).prob() }

// LogUpper is log P(X >= k), where Upper underflows as well.
func (x NegativeBinomial) LogUpper(k int64) float64 { return x.side(k, true, false).logProb() }

// Lower is P(X <= k).
func (x NegativeBinomial) Lower(k int64) float64 { return x.side(k, false, false).prob() }

// LogLower is log P(X <= k), where Lower underflows as well.
func (x NegativeBinomial) LogLower(k int64) float64 { return x.side(k, false, false).logProb() }

// MidUpper is P(X > k) + P(X = k)/2 (Lancaster 1961).
func (x NegativeBinomial) MidUpper(k int64) float64 { return x.side(k, true, true).prob() }

// LogMidUpper is the logarithm of MidUpper.
func (x NegativeBinomial) LogMidUpper(k int64) float64 { return x.side(k, true, true).logProb() }

// MidLower is P(X < k) + P(X = k)/2 (Lancaster 1961).
func (x NegativeBinomial) MidLower(k int64) float64 { return x.side(k, false, true).prob() }

// LogMidLower is the logarithm of MidLower.
func (x NegativeBinomial) LogMidLower(k int64) float64 { return x.side(k, false, true).logProb() }

// CriticalUpper is the smallest k with P(X >= k) <= limit and the size attained there; ok is
// false where no count can signal. See the package's note on sizes that hit a limit exactly.
func (x NegativeBinomial) CriticalUpper(limit float64) (k int64, size float64, ok bool) {
	return criticalUpper(x, limit)
}

// CriticalLower is the largest k with P(X <= k) <= limit and the size attained there; ok is
// false where no count can signal.
func (x NegativeBinomial) CriticalLower(limit float64) (k int64, size float64, ok bool) {
	return criticalLower(x, limit)
}

// TwoSided is the two-sided p-value of k, at most 1.
func (x NegativeBinomial) TwoSided(k int64, how Sides) float64 {
	return twoSided(x, k, how, false).prob()
}

// LogTwoSided is the logarithm of TwoSided, where TwoSided underflows as well.
func (x NegativeBinomial) LogTwoSided(k int64, how Sides) float64 {
	return twoSided(x, k, how, false).logProb()
}
