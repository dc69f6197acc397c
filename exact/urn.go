package exact

import "math"

// urn is the noncentral hypergeometric law of Fisher (1935): draws balls from white + black,
// the odds of white being odds times what chance gives. odds = 1 (fair) is the hypergeometric.
type urn struct {
	white, black, draws float64
	odds                dd
}

func (u urn) fair() bool { return u.odds == dd{1, 0} }

func (u urn) support() (lo, hi float64) {
	return max(0, u.draws-u.black), min(u.white, u.draws)
}

// point is the central probability of x, times odds^x.
func (u urn) point(x float64) point {
	n := dd{u.white, 0}.addFloat(u.black)
	rest := dd{u.white, 0}.addFloat(u.black).addFloat(-u.draws).float()
	a, b, c, d := x, u.draws-x, u.white-x, rest-(u.white-x)
	e := dd{}
	for _, cell := range [4][3]float64{{a, u.white, u.draws}, {b, u.black, u.draws}, {c, u.white, rest}, {d, u.black, rest}} {
		if cell[0] > 0 {
			e = e.add(xlog(cell[0], twoProd(cell[1], cell[2]).div(n)))
		}
	}
	e = e.neg().addFloat(stirling(u.white) + stirling(u.black) + stirling(u.draws) + stirling(rest) -
		stirling(n.hi) - stirling(a) - stirling(b) - stirling(c) - stirling(d))
	root := circle(u.white) / circle(n.hi) * (circle(u.draws) / circle(a) * circle(rest) / circle(b)) * (circle(u.black) / circle(c) / circle(d))
	if !u.fair() {
		e = e.add(u.odds.log().mulFloat(x))
	}
	return point{e.hi, e.lo, math.Sqrt(root)}
}

// up sums f(x), f(x+1), ... over f(x), and the same weighted with 0, 1, ...
func (u urn) up(x float64) (sum, first float64) {
	_, hi := u.support()
	const chunk = 128 // terms between fresh starts: a longer product or sum gathers rounding
	d := u.black - u.draws
	t, part, partFirst := 1.0, 1.0, 0.0
	var from point
	for j := x; j < hi && t > 0x1p-56*(sum+part); j++ {
		if n := j - x; n > 0 && math.Mod(n, chunk) == 0 {
			if n == chunk {
				from = u.point(x)
			}
			t = u.point(j).over(from).value()
			sum, part = sum+part, 0
			first, partFirst = first+partFirst, 0
		}
		t *= float64(float64((u.white-j)*(u.draws-j))/float64((j+1)*(d+j+1))) * u.odds.hi
		part += t
		partFirst += float64(t * (j + 1 - x))
	}
	sum += part
	first += partFirst
	sum += float64(u.odds.lo / u.odds.hi * first)
	return sum, first
}

// mirror swaps black for white: x becomes draws-x.
func (u urn) mirror() urn { return urn{u.black, u.white, u.draws, dd{1, 0}.div(u.odds)} }

// mode is a count of the largest probability, to within one.
func (u urn) mode() float64 {
	lo, hi := u.support()
	if u.fair() {
		return min(hi, max(lo, math.Floor((u.white+1)/(u.white+u.black+2)*(u.draws+1))))
	}
	// (white-j)(draws-j) odds = (j+1)(black-draws+j+1)
	s := max(1, u.odds.hi)
	o, one := u.odds.hi/s, 1/s
	a := o - one
	b := -(o*(u.white+u.draws+2) + one*(u.black-u.draws))
	c := o * (u.white + 1) * (u.draws + 1)
	d := math.Sqrt(max(0, b*b-4*a*c))
	root := 2 * c / (d - b)
	if b > 0 {
		root = (b + d) / (-2 * a)
	}
	return min(hi, max(lo, math.Floor(root)))
}

// total is the sum of all probabilities over that of the mode, and the mean.
func (u urn) total() (mode, sum, mean float64) {
	mode = u.mode()
	s, f := u.up(mode)
	t, g := u.mirror().up(u.draws - mode)
	sum = s + (t - 1)
	return mode, sum, mode + (f-g)/sum
}

func (u urn) side(x float64, upper, mid bool) side {
	lo, hi := u.support()
	switch {
	case x < lo:
		return outside(upper)
	case x > hi:
		return outside(!upper)
	case lo == hi:
		return atOnly(mid)
	}
	if !upper {
		return u.mirror().side(u.draws-x, true, mid)
	}
	mode := u.mode()
	s := side{flip: x <= mode}
	from := u
	if s.flip {
		if !mid {
			if x == lo {
				return certain
			}
			x--
		}
		from = u.mirror()
		s.ratio, _ = from.up(u.draws - x)
	} else {
		s.ratio, _ = u.up(x)
	}
	s.point = u.point(x)
	if mid {
		s.ratio -= 0.5
	}
	if !u.fair() {
		m, sum, _ := u.total()
		s.ratio /= sum
		s.point = s.over(u.point(m))
	}
	return s
}

// mass is the probability of x.
func (u urn) mass(x float64) point {
	lo, hi := u.support()
	if x < lo || x > hi {
		return impossible.point
	}
	if lo == hi {
		return point{0, 0, 1}
	}
	p := u.point(x)
	if !u.fair() {
		m, sum, _ := u.total()
		p = p.over(u.point(m))
		p.root /= sum
	}
	return p
}

// logRatio is the logarithm of the probability of x over that of y: the total falls out.
func (u urn) logRatio(x, y float64) float64 {
	lo, hi := u.support()
	p, q := impossible.point, impossible.point
	if x >= lo && x <= hi {
		p = u.point(x)
	}
	if y >= lo && y <= hi {
		q = u.point(y)
	}
	return p.minus(q)
}

func (p point) over(q point) point {
	d := dd{p.hi, p.lo}.add(dd{-q.hi, -q.lo})
	return point{d.hi, d.lo, p.root / q.root}
}

// lowerOdds solves P(X >= x; odds) = a for the odds, x above the least count.
func (u urn) lowerOdds(x, a float64, mid bool) float64 {
	lo, _ := u.support()
	if x <= lo {
		return 0
	}
	c, b, d := u.white-x, u.draws-x, u.black-u.draws+x
	z := normalQuantile(a)
	v := 1/(x+0.5) + 1/(b+0.5) + 1/(c+0.5) + 1/(d+0.5)
	l := logOf((x+0.5)*(d+0.5)/((b+0.5)*(c+0.5))) - z*math.Sqrt(v)
	left, right := math.Inf(-1), math.Inf(1)
	for range 200 {
		u.odds = dd{expTwo(l, 0), 0}
		mode, all, mean := u.total()
		sum, first := u.up(x)
		s := side{ratio: sum}
		if x > mode { // as side has it, with the sums at hand
			if mid {
				s.ratio -= 0.5
			}
			s.ratio /= all
			s.point = u.point(x).over(u.point(mode))
		} else {
			s = u.side(x, true, mid)
		}
		f := s.logOver(a)
		slope := x + first/sum - mean
		if mid {
			slope = x + first/(sum-0.5) - mean
		}
		step := -f / slope
		if f > 0 {
			right = min(right, l)
		} else {
			left = max(left, l)
		}
		if math.Abs(step) < 1e-9 {
			return u.odds.hi * expTwo(step, 0)
		}
		next := l + step
		if !(next > left && next < right) || math.IsNaN(next) {
			next = 0.5 * (left + right)
			if math.IsInf(next, 0) {
				next = l + math.Copysign(1, step)
			}
		}
		if next == left || next == right {
			break
		}
		l = next
	}
	return expTwo(l, 0)
}

// spread is the mode and the standard deviation of the four-cell approximation there.
func (u urn) spread() (mean, sd float64) {
	m := u.mode()
	v := 1/(m+0.5) + 1/(u.draws-m+0.5) + 1/(u.white-m+0.5) + 1/(u.black-u.draws+m+0.5)
	return m, 1 / math.Sqrt(v)
}
