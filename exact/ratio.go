package exact

import "math"

// directTerms is the number of terms up to which a tail over its first term is summed term by
// term; beyond it the integral is taken.
const directTerms = 200

// reach is the distance, in units of u, at which exp(-c u - s u u/2) has fallen below 2^-55.
func reach(c, s float64) float64 {
	return 76 / (c + math.Sqrt(math.FMA(c, c, 76*s)))
}

// logLess1 is log(1+x) - x for |x| < 0.6, without cancellation.
func logLess1(x float64) float64 {
	s := x / (2 + x)
	z := float64(s * s)
	c := math.FMA(z, 2.0/25, 2.0/23)
	c = math.FMA(z, c, 2.0/21)
	c = math.FMA(z, c, 2.0/19)
	c = math.FMA(z, c, 2.0/17)
	c = math.FMA(z, c, 2.0/15)
	c = math.FMA(z, c, 2.0/13)
	c = math.FMA(z, c, 2.0/11)
	c = math.FMA(z, c, 2.0/9)
	c = math.FMA(z, c, 2.0/7)
	c = math.FMA(z, c, 2.0/5)
	c = math.FMA(z, c, 2.0/3)
	return s * math.FMA(z, c, -x)
}

// panel integrates exp(-c u + a g(u*su) + b g(u*sv)) over u from 0 to t, g(x) = log(1+x)-x,
// by one Gauss-Legendre panel. Both g terms are negative: nothing cancels.
func panel(c, a, su, b, sv, t float64) float64 {
	if t*max(1, math.Abs(sv)) < 0.02 {
		return shortPanel(c, a, su, b, sv, t)
	}
	sum := 0.0
	for i := range shortGauss {
		u := t * shortGauss[i][0]
		e := math.FMA(-c, u, float64(a*logLess1(u*su)))
		if b != 0 {
			e = math.FMA(b, logLess1(u*sv), e)
		}
		sum = math.FMA(shortGauss[i][1], expTwo(e, 0), sum)
	}
	return t * sum
}

// shortPanel is panel with g as one polynomial in x = u/t: its 13 terms suffice for |u|, |u sv|
// under 0.02.
func shortPanel(c, a, su, b, sv, t float64) float64 {
	var g [14]float64
	x, y := t*su, t*sv
	px, py := -a*x, -b*y
	for n := 2; n < len(g); n++ {
		px, py = -px*x, -py*y
		g[n] = (px + py) * -inverse[n]
	}
	g[1] = -c * t
	sum := 0.0
	if t*max(1, math.Abs(sv)) < 2e-3 { // 76 x^7/9 is under 2^-58
		for i := range shortGauss {
			u := shortGauss[i][0]
			z := float64(u * u)
			even := math.FMA(math.FMA(math.FMA(g[8], z, g[6]), z, g[4]), z, g[2])
			odd := math.FMA(math.FMA(math.FMA(g[7], z, g[5]), z, g[3]), z, g[1])
			sum = math.FMA(shortGauss[i][1], expTwo(math.FMA(even, z, float64(odd*u)), 0), sum)
		}
		return t * sum
	}
	for i := range shortGauss {
		u := shortGauss[i][0]
		z := float64(u * u)
		even := math.FMA(math.FMA(g[12], z, g[10]), z, g[8])
		even = math.FMA(math.FMA(math.FMA(even, z, g[6]), z, g[4]), z, g[2])
		odd := math.FMA(math.FMA(g[13], z, g[11]), z, g[9])
		odd = math.FMA(math.FMA(math.FMA(math.FMA(odd, z, g[7]), z, g[5]), z, g[3]), z, g[1])
		sum = math.FMA(shortGauss[i][1], expTwo(math.FMA(even, z, float64(odd*u)), 0), sum)
	}
	return t * sum
}

// poissonUpperRatio is P(X >= k)/P(X = k) for k >= 1, k above mu or near it.
func poissonUpperRatio(k float64, mu dd) float64 {
	if k > directTerms {
		c := dd{k - 1, 0}.add(mu.neg()).float()
		if k >= uniformFrom*uniformFrom && c < uniformTo*k {
			return poissonUniform(false, k, mu)
		}
		if t := reach(c, k-1); k*t > directTerms {
			return k * panel(c, k-1, -1, 0, 0, min(t, 1))
		}
	}
	t, sum := 1.0, 1.0
	if k < float64(len(inverse)-2*directTerms) { // t is under 2^-56 by 2*directTerms terms
		for i := int(k) + 1; t > 0x1p-56*sum; i++ {
			t *= float64(mu.hi * inverse[i])
			sum += t
		}
	} else {
		for d := k + 1; t > 0x1p-56*sum; d++ {
			t *= mu.hi / d
			sum += t
		}
	}
	if mu.lo != 0 {
		sum += float64(mu.lo / mu.hi * (k - float64(sum*(k-mu.hi))))
	}
	return sum
}

// poissonLowerRatio is P(X <= k)/P(X = k) for k >= 0, k below mu or near it.
func poissonLowerRatio(k float64, mu dd) float64 {
	if k > directTerms {
		c := mu.addFloat(-k).float()
		if k >= uniformFrom*uniformFrom && c < uniformTo*k {
			return 1 + poissonUniform(true, k, mu)
		}
		if t := reach(c, k); mu.hi*t > directTerms {
			return mu.hi * panel(c, k, 1, 0, 0, t)
		}
	}
	inv := 1 / mu.hi
	t, sum := 1.0, 1.0
	for j := k; j > 0 && t > 0x1p-56*sum; j-- {
		t *= float64(j * inv)
		sum += t
	}
	if mu.lo != 0 {
		sum -= float64(mu.lo / mu.hi * (mu.hi + float64(sum*(k-mu.hi))))
	}
	return sum
}

// binomialUpperRatio is P(X >= k)/P(X = k) for 1 <= k <= n, k above np or near it.
func binomialUpperRatio(k, n float64, p, q dd) float64 {
	if k*((n-k)/n) >= uniformFrom*uniformFrom && k-n*p.hi < uniformTo*k*q.hi {
		return binomialUniform(k, n, p)
	}
	w := p.div(q)
	if min(k, n-k) > directTerms {
		c := q.mulFloat(k-1).add(p.mulFloat(n-k).neg()).float() / q.hi
		s := math.FMA(n-k, float64(w.hi*w.hi), k-1)
		if t := reach(c, s); k*t > directTerms {
			return k * panel(c, k-1, -1, n-k, w.hi, min(t, 1))
		}
	}
	t, sum, left := 1.0, 1.0, n-k
	if k < float64(len(inverse)-2*directTerms) {
		last := int(min(n, float64(len(inverse)-1)))
		for i := int(k) + 1; i <= last && t > 0x1p-56*sum; i++ {
			t *= float64(left*w.hi) * inverse[i]
			sum += t
			left--
		}
	} else {
		for d := k + 1; left > 0 && t > 0x1p-56*sum; d++ {
			t *= float64(left*w.hi) / d
			sum += t
			left--
		}
	}
	if w.lo != 0 {
		sum += float64(w.lo / w.hi * (float64(k*q.hi) - float64(sum*(k-float64(n*p.hi)))))
	}
	return sum
}
