package exact

import "math"

// Garwood gives the exact two-sided bounds at level 1-alpha of the mean of a Poisson count n
// (Garwood 1936, Biometrika 28): P(X >= n; lower) = alpha/2 = P(X <= n; upper). n = 0 gives
// lower = 0 and keeps alpha/2 above; for one-sided bounds give 2 alpha. Divide by the exposure
// for the rate. alpha is in (0, 1]; n < 0, n > 2^53 or alpha outside gives NaN.
func Garwood(n int64, alpha float64) (lower, upper float64) {
	if n < 0 || n > maxCount || !(alpha > 0 && alpha <= 1) {
		return math.NaN(), math.NaN()
	}
	if n > 0 {
		lower = poissonBound(float64(n), alpha/2, true, false)
	}
	return lower, poissonBound(float64(n), alpha/2, false, false)
}

// GarwoodMid is Garwood with mid-p tails (Lancaster 1961): no longer guaranteed to cover, but
// near its level on average.
func GarwoodMid(n int64, alpha float64) (lower, upper float64) {
	if n < 0 || n > maxCount || !(alpha > 0 && alpha <= 1) {
		return math.NaN(), math.NaN()
	}
	if n > 0 {
		lower = poissonBound(float64(n), alpha/2, true, true)
	}
	return lower, poissonBound(float64(n), alpha/2, false, true)
}

// ClopperPearson gives the exact two-sided bounds at level 1-alpha of the probability behind x
// events in n trials (Clopper and Pearson 1934, Biometrika 26). x = 0 gives lower = 0, x = n
// gives upper = 1, each keeping alpha/2 on its other side. One minus a bound, when the bound is
// near 1, is best had by reflection: 1-lower of x is the upper of n-x, and the reverse. NaN
// outside 0 <= x <= n <= 2^53, n > 0, 0 < alpha <= 1.
func ClopperPearson(x, n int64, alpha float64) (lower, upper float64) {
	return binomialBounds(x, n, alpha, false)
}

// ClopperPearsonMid is ClopperPearson with mid-p tails (Lancaster 1961).
func ClopperPearsonMid(x, n int64, alpha float64) (lower, upper float64) {
	return binomialBounds(x, n, alpha, true)
}

// MeanLower is the one-sided lower bound at level 1-a of a Poisson mean for n events, 0 < a < 1:
// P(X >= n) = a there. MeanUpper is the upper one: P(X <= n) = a. NaN outside the domain.
func MeanLower(n int64, a float64) float64 {
	switch {
	case n < 0 || n > maxCount || !(a > 0 && a < 1):
		return math.NaN()
	case n == 0:
		return 0
	case a > 0.5: // P(X <= n-1) = 1-a, which is exact
		return poissonBound(float64(n-1), 1-a, false, false)
	}
	return poissonBound(float64(n), a, true, false)
}

// MeanUpper is the counterpart of MeanLower.
func MeanUpper(n int64, a float64) float64 {
	switch {
	case n < 0 || n > maxCount || !(a > 0 && a < 1):
		return math.NaN()
	case a > 0.5:
		return poissonBound(float64(n+1), 1-a, true, false)
	}
	return poissonBound(float64(n), a, false, false)
}

// ChanceLower is the one-sided lower bound at level 1-a of the probability behind x events in n
// trials, 0 < a < 1: P(X >= x) = a there. ChanceUpper is the upper one; NaN outside the domain.
func ChanceLower(x, n int64, a float64) float64 {
	switch {
	case x < 0 || x > n || n < 1 || n > maxCount || !(a > 0 && a < 1):
		return math.NaN()
	case x > 0 && a > 0.5: // P(X <= x-1) = 1-a
		_, p := binomialLower(n-x+1, n, 1-a, false)
		return p
	}
	p, _ := binomialLower(x, n, a, false)
	return p
}

// ChanceUpper is the counterpart of ChanceLower: P(X <= x) = a.
func ChanceUpper(x, n int64, a float64) float64 {
	switch {
	case x < 0 || x > n || n < 1 || n > maxCount || !(a > 0 && a < 1):
		return math.NaN()
	case x < n && a > 0.5:
		p, _ := binomialLower(x+1, n, 1-a, false)
		return p
	}
	_, p := binomialLower(n-x, n, a, false)
	return p
}

func binomialBounds(x, n int64, alpha float64, mid bool) (lower, upper float64) {
	if x < 0 || x > n || n < 1 || n > maxCount || !(alpha > 0 && alpha <= 1) {
		return math.NaN(), math.NaN()
	}
	lower, _ = binomialLower(x, n, alpha/2, mid)
	_, upper = binomialLower(n-x, n, alpha/2, mid)
	return lower, upper
}

// poissonBound solves tail(k; mu) = a for mu by safeguarded Halley steps in log mu on the log of
// the tail. With S = tail/P(X = k), d log tail/d log mu is k/S for the upper and -mu/S for the
// lower tail, so a step costs one tail.
func poissonBound(k, a float64, upper, mid bool) float64 {
	if k == 0 {
		if mid {
			a *= 2
		}
		return max(0, -logOf(a))
	}
	mu := poissonStart(k, a, upper)
	lo, hi := 0.0, math.Inf(1)
	for range 100 {
		s := poissonSide(k, dd{mu, 0}, upper, mid)
		f, slope, bend := poissonStep(s, k, mu, a, upper, mid)
		if f > 0 == upper {
			hi = min(hi, mu)
		} else {
			lo = max(lo, mu)
		}
		d := f / slope
		step := -d / (1 - min(0.5, max(-0.5, 0.5*d*bend)))
		next := mu
		if math.Abs(step) < 1e-3 {
			next += float64(mu*step) * math.FMA(step, math.FMA(step, 1.0/6, 0.5), 1)
		} else {
			next *= expTwo(step, 0)
		}
		if math.Abs(step) < 2e-6/(1+math.Abs(bend)) || next == mu {
			return next
		}
		if !(next > lo && next < hi) {
			if math.IsInf(hi, 1) {
				next = 2 * lo
			} else {
				next = 0.5 * (lo + hi)
			}
			if next <= lo || next >= hi {
				return mu
			}
		}
		mu = next
	}
	return mu
}

// poissonStep gives log(tail/a), its slope in log mu, and the slope's relative slope.
func poissonStep(s side, k, mu, a float64, upper, mid bool) (f, slope, bend float64) {
	f = s.logOver(a)
	if s.flip { // near 1/2: the tail's own value in place of pmf times ratio
		p := s.prob()
		pmf := poissonPoint(k, dd{mu, 0}).value()
		s.ratio = p / pmf
	}
	weight := mu // derivative of the tail in log mu, in units of pmf(k)
	if upper {
		weight = k
	}
	if mid {
		weight = 0.5 * (k + mu)
	}
	slope = weight / s.ratio
	if !upper {
		slope = -slope
	}
	bend = k - mu - slope
	switch {
	case mid:
		bend += mu / (k + mu)
	case !upper:
		bend++
	}
	return f, slope, bend
}

// poissonStart is a first guess: Wilson and Hilferty's cube root, or the leading term of the
// tail where that is nearer.
func poissonStart(k, a float64, upper bool) float64 {
	z := normalQuantile(a)
	if upper {
		c := 1 - 1/(9*k) - z/(3*math.Sqrt(k))
		if c > 0.5 {
			return k * c * c * c
		}
		g := 0.0
		if c > 0 {
			g = k * c * c * c
		}
		// P(X >= k) < mu^k/k!: the mean is at least this
		l := (roughLog(max(a, 0x1p-1022)) + 0.5*roughLog(2*math.Pi*k) + k*roughLog(k) - k + 1/(12*k)) / k
		return max(g, expTwo(l, 0))
	}
	k++
	c := 1 - 1/(9*k) + z/(3*math.Sqrt(k))
	return k * c * c * c
}

// normalQuantile is z with P(Z > z) = a to about 1e-3 for a <= 1/2 (Abramowitz and Stegun
// 26.2.23), 0 above: only ever a start.
func normalQuantile(a float64) float64 {
	if a >= 0.5 {
		return 0
	}
	t := math.Sqrt(-2 * roughLog(max(a, 0x1p-1022)))
	return t - (2.515517+t*(0.802853+t*0.010328))/(1+t*(1.432788+t*(0.189269+t*0.001308)))
}

// binomialLower solves P(X >= x; n, p) = a for p and gives it and 1-p, each to full relative
// accuracy. The step is taken in the smaller of the two.
func binomialLower(x, n int64, a float64, mid bool) (p, q float64) {
	k, m := float64(x), float64(n)
	switch x {
	case 0:
		return 0, 1
	case n: // p^n = a
		if mid {
			a *= 2
		}
		if a >= 1 {
			return 1, 0
		}
		l := dd{a, 0}.log().div(dd{m, 0})
		return expTwo(l.hi, l.lo), -expm1Of(l.hi)
	}
	p = betaStart(k, m, a)
	q = 1 - p
	lo, hi := math.Inf(-1), math.Inf(1) // of log odds
	for range 100 {
		pd, qd := Binomial{P: p, Q: q}.chances()
		s := binomialSide(x, n, pd, qd, true, mid)
		f := s.logOver(a)
		ratio := s.ratio
		if s.flip {
			ratio = s.prob() / binomialPoint(k, m, pd, qd).value()
		}
		// derivative of the tail in log odds, in units of pmf(k): k q, for mid-p the mean of that and (n-k) p
		w := k * q
		if mid {
			w = 0.5 * (k*q + (m-k)*p)
		}
		slope := w / ratio
		bend := k - m*p - slope
		if mid {
			bend += 0.5 * (m - 2*k) * p * q / w
		} else {
			bend -= p
		}
		d := f / slope
		step := -d / (1 - min(0.5, max(-0.5, 0.5*d*bend)))
		if math.Abs(step) < 2e-6/(1+math.Abs(bend)) {
			return shiftOdds(p, q, step)
		}
		odds := logOf(p / q)
		if f > 0 {
			hi = min(hi, odds)
		} else {
			lo = max(lo, odds)
		}
		if !(odds+step > lo && odds+step < hi) {
			next := 0.5 * (lo + hi)
			if math.IsInf(next, 0) {
				next = odds + math.Copysign(1, step)
			}
			if next == lo || next == hi {
				return p, q
			}
			step = next - odds
		}
		p, q = shiftOdds(p, q, step)
	}
	return p, q
}

// shiftOdds multiplies the odds p/q by exp(step).
func shiftOdds(p, q, step float64) (float64, float64) {
	if p > q {
		q, p = shiftOdds(q, p, -step)
		return p, q
	}
	e := float64(step * math.FMA(step, math.FMA(step, 1.0/6, 0.5), 1)) // e^step - 1
	if math.Abs(step) > 1e-3 {
		e = expm1Of(step)
	}
	// p' = p e^s/(q + p e^s) = p + p q e/(1 + p e)
	p = math.FMA(p, float64(q*e)/math.FMA(p, e, 1), p)
	return p, 1 - p
}

// betaStart is a first guess at the lower bound, from the F-like form of Wilson and Hilferty
// (Abramowitz and Stegun 26.5.22), or from the leading term.
func betaStart(k, n, a float64) float64 {
	b := n - k + 1
	z := normalQuantile(a)
	if k > 1 && b > 1 {
		l := (z*z - 3) / 6
		u, v := 1/(2*k-1), 1/(2*b-1)
		h := 2 / (u + v)
		if g := z*math.Sqrt(max(0, h+l))/h - (v-u)*(l+5.0/6-2/(3*h)); g < 300 {
			p := k / (k + b*expTwo(2*g, 0))
			if p > 0 && p < 1 {
				return p
			}
		}
	}
	if k == 1 {
		return max(-expm1Of(log1pOf(-a)/n), 1e-300)
	}
	l := roughLog(max(a, 0x1p-1022))/k - 0.1
	return min(0.5, max(expTwo(l, 0)*k/(n+1), 1e-300))
}
