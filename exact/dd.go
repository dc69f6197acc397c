package exact

import "math"

// dd is an unevaluated sum hi + lo with |lo| <= ulp(hi)/2: about 106 bits (Dekker 1971,
// Numerische Mathematik 18). Products go through math.FMA or an explicit conversion, so that
// an architecture that fuses multiply and add gives the same bits.
type dd struct{ hi, lo float64 }

func fastTwoSum(a, b float64) dd { // |a| >= |b|
	s := a + b
	return dd{s, b - (s - a)}
}

func twoSum(a, b float64) dd {
	s := a + b
	t := s - a
	return dd{s, (a - (s - t)) + (b - t)}
}

func twoProd(a, b float64) dd {
	p := float64(a * b)
	return dd{p, math.FMA(a, b, -p)}
}

func (a dd) neg() dd { return dd{-a.hi, -a.lo} }

// add errs by about 2^-105 (|a|+|b|): absolute, not relative, where a and b cancel.
func (a dd) add(b dd) dd {
	s := twoSum(a.hi, b.hi)
	return fastTwoSum(s.hi, s.lo+(a.lo+b.lo))
}

func (a dd) addFloat(b float64) dd {
	s := twoSum(a.hi, b)
	return fastTwoSum(s.hi, s.lo+a.lo)
}

func (a dd) mul(b dd) dd {
	p := twoProd(a.hi, b.hi)
	return fastTwoSum(p.hi, math.FMA(a.hi, b.lo, math.FMA(a.lo, b.hi, p.lo)))
}

func (a dd) mulFloat(b float64) dd {
	p := twoProd(a.hi, b)
	return fastTwoSum(p.hi, math.FMA(a.lo, b, p.lo))
}

func (a dd) div(b dd) dd {
	inv := 1 / b.hi
	q := float64(a.hi * inv)
	r := math.FMA(-q, b.hi, a.hi) + math.FMA(-q, b.lo, a.lo)
	return fastTwoSum(q, float64(r*inv))
}

func (a dd) float() float64 { return a.hi + a.lo }

const (
	ln2Head = 0.6931471805592082 // 40 bits, so that e*ln2Head is exact
	ln2Mid  = 7.371002565167799e-13
	ln2Tail = 1.94704509238075e-31
)

// log returns the natural logarithm of a > 0: absolute error about 2^-53 |r|^3/3 with
// |r| <= 1/362, that is under 4e-24, and relative error under 2^-52 of log a near a = 1.
func (a dd) log() dd {
	e := 0.0
	if a.hi < 0x1p-960 {
		a, e = dd{a.hi * 0x1p200, a.lo * 0x1p200}, -200
	} else if a.hi > 0x1p960 {
		a, e = dd{a.hi * 0x1p-200, a.lo * 0x1p-200}, 200
	}
	bits := math.Float64bits(a.hi)
	x := int(bits>>52) - 1023
	m := math.Float64frombits(bits&(1<<52-1) | 1023<<52)
	if m > math.Sqrt2 {
		m *= 0.5
		x++
	}
	e += float64(x)
	lo := a.lo * math.Float64frombits(uint64(1023-x)<<52)
	row := &logTable[int(m*256+0.5)-181]
	p := twoProd(m, row[0])
	r := fastTwoSum(p.hi-1, math.FMA(lo, row[0], p.lo))
	s := twoProd(r.hi, r.hi)
	s.lo = math.FMA(2*r.hi, r.lo, s.lo)
	c := math.FMA(r.hi, 1.0/9, -1.0/8)
	c = math.FMA(r.hi, c, 1.0/7)
	c = math.FMA(r.hi, c, -1.0/6)
	c = math.FMA(r.hi, c, 1.0/5)
	c = math.FMA(r.hi, c, -1.0/4)
	c = math.FMA(r.hi, c, 1.0/3)
	cube := float64(float64(r.hi*s.hi) * c)
	v := fastTwoSum(r.hi, -0.5*s.hi)
	v.lo += math.FMA(-0.5, s.lo, r.lo) + cube
	h := dd{row[1], row[2]}
	if e != 0 {
		h = twoSum(e*ln2Head, row[1])
		h.lo += math.FMA(e, ln2Mid, row[2])
	} else if row[1] == 0 {
		return fastTwoSum(v.hi, v.lo)
	}
	h.lo += v.lo
	w := fastTwoSum(h.hi, v.hi) // |log c + e log 2| is past any |log(1+r)|
	return fastTwoSum(w.hi, w.lo+h.lo)
}

// expTwo returns exp(hi+lo) for |lo| << 1; error about 0.51 ulp, 0 below the subnormals.
func expTwo(hi, lo float64) float64 {
	const (
		scale = 184.6649652337873
		head  = 0.005415212348111709 // ln 2/128 in 36 bits
		tail  = 1.2864023111638346e-14
	)
	switch {
	case hi != hi || hi > 709.8:
		return math.Exp(hi)
	case hi < -745.2:
		return 0
	}
	n := math.RoundToEven(hi * scale)
	r := math.FMA(-n, head, hi)
	r = math.FMA(-n, tail, r) + lo
	k := int(n)
	t := &expTable[k&127]
	q := math.FMA(r, 1.0/720, 1.0/120)
	q = math.FMA(r, q, 1.0/24)
	q = math.FMA(r, q, 1.0/6)
	q = math.FMA(r, q, 0.5)
	q = math.FMA(float64(r*r), q, r)
	v := t[0] + math.FMA(t[0], q, t[1])
	k >>= 7
	if k > -1022 && k < 1023 {
		return v * math.Float64frombits(uint64(k+1023)<<52)
	}
	if k > 0 {
		return v * 0x1p1000 * math.Float64frombits(uint64(k-1000+1023)<<52)
	}
	return v * 0x1p-1000 * math.Float64frombits(uint64(k+1000+1023)<<52)
}

// logOf is the natural logarithm of x >= 0, log1pOf that of 1+x: the same bits everywhere.
func logOf(x float64) float64 {
	if !(x > 0) || x > math.MaxFloat64 {
		return math.Log(x)
	}
	return dd{x, 0}.log().float()
}

func log1pOf(x float64) float64 {
	if !(x > -1) {
		return math.Log1p(x)
	}
	return twoSum(1, x).log().float()
}

// roughLog is the logarithm of a normal x > 0 to about 1e-10: for starting values.
func roughLog(x float64) float64 {
	bits := math.Float64bits(x)
	m := math.Float64frombits(bits&(1<<52-1) | 1023<<52)
	e := int(bits>>52) - 1023
	if m > math.Sqrt2 {
		m *= 0.5
		e++
	}
	row := &logTable[int(m*256+0.5)-181]
	r := math.FMA(m, row[0], -1)
	return math.FMA(float64(e), ln2Head, row[1]) + math.FMA(float64(r*r), math.FMA(r, 1.0/3, -0.5), r)
}

// expLess is exp(y)-1-y without cancellation.
func expLess(y float64) float64 {
	if math.Abs(y) > 0.7 {
		return expTwo(y, 0) - 1 - y
	}
	c := 0.0
	for n := 18; n >= 2; n-- { // c becomes 1/2 + y/6 + ...
		c = math.FMA(c, y, 1) * inverse[n]
	}
	return c * y * y
}

// expm1Of is exp(y)-1.
func expm1Of(y float64) float64 {
	if math.Abs(y) > 0.7 {
		return expTwo(y, 0) - 1
	}
	return y + expLess(y)
}
