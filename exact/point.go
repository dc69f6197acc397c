package exact

import "math"

// maxCount is the largest count taken: beyond it float64 no longer holds every integer.
const maxCount = 1 << 53

// point is one probability held as exp(hi+lo)*root, so that its logarithm survives where the
// value itself underflows.
type point struct{ hi, lo, root float64 }

func (p point) value() float64 { return expTwo(p.hi, p.lo) * p.root }

func (p point) log() float64 {
	switch p.root {
	case 1:
		return p.hi + p.lo
	case 0:
		return math.Inf(-1)
	}
	r := dd{p.root, 0}.log()
	return dd{p.hi, p.lo}.add(r).float()
}

// side is a tail probability: pmf times ratio, or one minus that.
type side struct {
	point
	ratio float64
	flip  bool
}

var (
	certain    = side{point{0, 0, 0}, 1, true}
	impossible = side{point{0, 0, 0}, 1, false}
	undefined  = side{point{math.NaN(), 0, 1}, 1, false}
)

func (s side) prob() float64 {
	p := s.value() * s.ratio
	if s.flip {
		return 1 - p
	}
	return p
}

func (s side) logProb() float64 {
	if s.flip {
		return log1pOf(-s.value() * s.ratio)
	}
	if s.hi > -600 && s.root*s.ratio != 1 {
		return logOf(s.value() * s.ratio)
	}
	if s.root*s.ratio == 0 {
		return math.Inf(-1)
	}
	r := dd{s.root * s.ratio, 0}.log()
	return dd{s.hi, s.lo}.add(r).float()
}

// logOver is log(tail/a), accurate near tail = a.
func (s side) logOver(a float64) float64 {
	if p := s.prob(); p > 0x1p-960 && a > 0x1p-960 {
		return logOf(p / a)
	}
	return s.logProb() - logOf(a)
}

// stirling is log(k!) - (k+1/2) log k + k - log(2 pi)/2 for integers k (Loader 2000, Fast and
// accurate computation of binomial probabilities); 0 at k = 0.
func stirling(k float64) float64 {
	if k < 64 {
		return stirlingTable[int(k)]
	}
	return stirlingSeries(k)
}

// stirlingSeries is the same for real k >= 30 or so.
func stirlingSeries(k float64) float64 {
	r := 1 / k
	if k > 1e5 { // the next term is under 3e-18
		return r * (1.0 / 12)
	}
	z := float64(r * r)
	c := math.FMA(z, -691.0/360360, 1.0/1188)
	c = math.FMA(-z, c, 1.0/1680)
	c = math.FMA(-z, c, 1.0/1260)
	c = math.FMA(-z, c, 1.0/360)
	c = math.FMA(-z, c, 1.0/12)
	return float64(c * r)
}

// circle is 2 pi k, or 1 for k = 0: k! = sqrt(circle k) (k/e)^k exp(stirling k).
func circle(k float64) float64 {
	if k == 0 {
		return 1
	}
	return float64(2 * math.Pi * k)
}

// xlog is x log(x/m) in double-double, 0 for x = 0: one term of a deviance.
func xlog(x float64, m dd) dd {
	if x == 0 {
		return dd{}
	}
	if m.hi < 0x1p-900 {
		return dd{x, 0}.log().add(m.log().neg()).mulFloat(x)
	}
	return dd{x, 0}.div(m).log().mulFloat(x)
}

// poissonPoint is the Poisson probability of k at mean mu > 0: exp of minus the deviance
// k log(k/mu) + mu - k (Loader 2000).
func poissonPoint(k float64, mu dd) point {
	if k == 0 {
		return point{-mu.hi, -mu.lo, 1}
	}
	if k <= 8 && mu.hi < 500 && mu.hi > 0x1p-100 {
		w := mu.hi
		for range int(k) - 1 {
			w *= mu.hi
		}
		return point{-mu.hi, -mu.lo + k*mu.lo/mu.hi, float64(w * inverseFactorial[int(k)])}
	}
	d := mu.addFloat(-k).add(xlog(k, mu))
	e := d.neg().addFloat(-stirling(k))
	return point{e.hi, e.lo, 1 / math.Sqrt(circle(k))}
}

// binomialPoint is the binomial probability of k in n, p + q = 1, both positive.
func binomialPoint(k, n float64, p, q dd) point {
	switch k {
	case 0:
		d := q.log().mulFloat(n)
		return point{d.hi, d.lo, 1}
	case n:
		d := p.log().mulFloat(n)
		return point{d.hi, d.lo, 1}
	}
	m := n - k
	if m <= 8 && m < k {
		k, m, p, q = m, k, q, p
	}
	if k <= 8 && p.hi > 0x1p-60 && n*p.hi < 500 && p.lo == 0 {
		d := q.log().mulFloat(m)
		w := n * p.hi
		for i := 1.0; i < k; i++ {
			w *= float64((n - i) * p.hi)
		}
		return point{d.hi, d.lo, float64(w * inverseFactorial[int(k)])}
	}
	d := xlog(k, p.mulFloat(n)).add(xlog(m, q.mulFloat(n)))
	e := d.neg().addFloat(stirling(n) - stirling(k) - stirling(m))
	return point{e.hi, e.lo, math.Sqrt(n / (2 * math.Pi * k * m))}
}

// stirlingReal is stirling for real z > 0; small z are raised by the factorial's recurrence.
func stirlingReal(z dd) float64 {
	if z.hi >= 40 {
		return stirlingSeries(z.hi)
	}
	if z.lo == 0 && z.hi == math.Floor(z.hi) {
		return stirling(z.hi)
	}
	top, prod := z, dd{1, 0}
	for top.hi < 40 {
		top = top.addFloat(1)
		prod = prod.mul(top)
	}
	// log z! = log top! - log prod, each in Stirling's form
	d := top.addFloat(0.5).mul(top.log()).add(top.neg()).add(prod.log().neg())
	d = d.add(z.addFloat(0.5).mul(z.log()).neg()).add(z)
	return d.addFloat(stirlingSeries(top.hi)).float()
}
