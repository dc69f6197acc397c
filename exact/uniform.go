package exact

import "math"

// The ratio tail/probability where the standard deviation is large, by Temme's uniform
// expansion (1979, SIAM J. Math. Anal. 10; 1982, 13) with both parameters kept exact.
//
// Let D(t) be the deviance at t, z^2/2 = D with the sign of t-k/n, and v = (t-k/n) in standard
// deviations. Then v v' = z (1 + alpha v - beta v^2), and the integral of exp(-z^2/2) f(z), f =
// z/v - kappa z, from the tail's end to z is taken by parts again and again:
//
//	ratio = sd [E sqrt(pi/2) erfcx(|z|/sqrt 2) -+ (gamma0(z) + gamma1(z) + ...)]
//
// with E = exp(e) from Stirling's errors, exactly, gamma0 = 1/v - 1/z - kappa, and gamma(m+1) =
// (gamma(m)' - gamma(m)'(0))/z from f's Taylor series. With sd >= uniformFrom what is left out is
// under 1e-17.

// uniformFrom is the standard deviation from which the expansion is taken.
const uniformFrom = 400

// uniformTo is how far from the mean, relative to it, the expansion is taken.
const uniformTo = 0.1

// briefFrom is the standard deviation from which seven terms of the series do.
const briefFrom = 1000

// erfcx is exp(y^2) erfc(y) for y >= 0, and for y < 0 not far below.
func erfcx(y float64) float64 {
	if y < 0 {
		return 2*expTwo(y*y, 0) - erfcx(-y)
	}
	if y > 200 {
		r := 1 / (y * y)
		return math.FMA(r, math.FMA(r, math.FMA(r, -1.875, 0.75), -0.5), 1) / (y * math.Sqrt(math.Pi))
	}
	t := 256 / (4 + y)
	i := min(int(t), 63)
	u := 2*(t-float64(i)) - 1
	c := &erfcxTable[i]
	w := float64(u * u)
	even := math.FMA(math.FMA(math.FMA(c[6], w, c[4]), w, c[2]), w, c[0])
	odd := math.FMA(math.FMA(math.FMA(c[7], w, c[5]), w, c[3]), w, c[1])
	return math.FMA(odd, u, even)
}

// wave is the Taylor series of z/v: 2 halves terms, halves up to 6.
func wave(alpha, beta float64, halves int) (w [12]float64) {
	var a, b [6]float64 // powers of alpha^2 and beta
	a[0], b[0] = 1, 1
	for i := 1; i < halves; i++ {
		a[i] = float64(a[i-1] * float64(alpha*alpha))
		b[i] = float64(b[i-1] * beta)
	}
	for h := range halves {
		even, odd := &waveTable[2*h], &waveTable[2*h+1]
		e, o := float64(even[0]*a[h]), float64(odd[0]*a[h])
		if beta != 0 {
			for i := 1; i <= h; i++ {
				p := float64(a[h-i] * b[i])
				e = math.FMA(even[i], p, e)
				o = math.FMA(odd[i], p, o)
			}
		}
		w[2*h], w[2*h+1] = e, float64(o*alpha)
	}
	return w
}

// waveFactor[j] is j-1, (j-1)(j-3), (j-1)(j-3)(j-5).
var waveFactor = [12][3]float64{
	3: {2}, 4: {3}, 5: {4, 8}, 6: {5, 15}, 7: {6, 24, 48}, 8: {7, 35, 105}, 9: {8, 48, 192}, 10: {9, 63, 315}, 11: {10, 80, 480},
}

// uniform gives the ratio: y is |z|/sqrt 2, z has the sign of v, the upper tail has them negative
// (or next to 0).
func uniform(lower bool, sd, e, y, v, alpha, beta, kappa float64) float64 {
	halves := 6
	if sd >= briefFrom {
		halves = 4
	}
	w := wave(alpha, beta, halves)
	z := math.Copysign(math.Sqrt2*y, v)
	w[1] -= kappa
	var g0 float64
	if y > 0.3 {
		g0 = 1/v - 1/z - kappa
	} else {
		for j := 6; j >= 1; j-- {
			g0 = math.FMA(g0, z, w[j])
		}
	}
	// gamma1 = sum over j of (j-1) w[j] z^(j-3), and so on
	top := 2*halves - 1
	var g1, g2 float64
	for j := top; j >= 3; j-- {
		g1 = math.FMA(g1, z, float64(waveFactor[j][0]*w[j]))
	}
	for j := top; j >= 5; j-- {
		g2 = math.FMA(g2, z, float64(waveFactor[j][1]*w[j]))
	}
	g3 := waveFactor[7][2] * w[7]
	if halves > 4 {
		g3 = 0
		for j := top; j >= 7; j-- {
			g3 = math.FMA(g3, z, float64(waveFactor[j][2]*w[j]))
		}
	}
	g := g0 + (g1 + (g2 + g3))
	if y = math.Copysign(y, v); !lower {
		g, y = -g, -y
	}
	e = math.FMA(e, math.FMA(e, 0.5, 1), 1) // exp of under 1e-6
	return sd * math.FMA(e*math.Sqrt(math.Pi/2), erfcx(y), g)
}

// poissonUniform is P(X >= k)/P(X = k), or P(X < k)/P(X = k) for the lower tail.
func poissonUniform(lower bool, k float64, mu dd) float64 {
	d := mu.addFloat(-k).float()
	sd := math.Sqrt(k)
	y := math.Sqrt(-k * logLess1(d/k))
	return uniform(lower, sd, stirling(k), y, d/sd, 1/sd, 0, 0)
}

// binomialUniform is P(X >= k)/P(X = k).
func binomialUniform(k, n float64, p dd) float64 {
	m := n - k
	d := p.mulFloat(n).addFloat(-k).float()
	sd := math.Sqrt(k * (m / n))
	y := math.Sqrt(-float64(k*logLess1(d/k)) - float64(m*logLess1(-d/m)))
	e := stirling(k) + stirling(m) - stirling(n)
	return uniform(false, sd, e, y, d/sd, (m-k)/(n*sd), 1/n, k/(n*sd))
}

// nearMean is how far from k, relative to it, nearPoisson's series is taken.
const nearMean = 0.02

// nearPoisson is the probability of k and the ratio in one, for k >= uniformFrom^2 and a mean
// within nearMean of it: the deviance mu (d^2/2 - d^3/3 + ...), d = mu/k - 1, needs no logarithm.
func nearPoisson(lower bool, k float64, mu dd) (point, float64) {
	delta := mu.addFloat(-k)
	d := delta.div(dd{k, 0})
	x := d.hi
	z := float64(x * x)
	even := math.FMA(math.FMA(math.FMA(math.FMA(math.FMA(z, 1.0/14, 1.0/12), z, 1.0/10), z, 1.0/8), z, 1.0/6), z, 1.0/4)
	odd := math.FMA(math.FMA(math.FMA(math.FMA(z, 1.0/13, 1.0/11), z, 1.0/9), z, 1.0/7), z, 1.0/5)
	rest := float64(float64(k*z)*z) * math.FMA(-odd, x, even)
	third := d.mul(dd{1.0 / 3, 0x1.5555555555555p-56})
	dev := delta.mul(d).mul(third.neg().addFloat(0.5)).addFloat(rest)
	st, sd := stirlingSeries(k), math.Sqrt(k)
	e := dev.neg().addFloat(-st)
	ratio := uniform(lower, sd, st, math.Sqrt(dev.hi), delta.hi/sd, 1/sd, 0, 0)
	if lower {
		ratio++
	}
	return point{e.hi, e.lo, 1 / math.Sqrt(2*math.Pi*k)}, ratio
}
