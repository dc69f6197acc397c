package exact

import (
	"math"
	"math/big"
	"testing"
)

const bigBits = 240

func bigOf(v float64) *big.Float { return new(big.Float).SetPrec(bigBits).SetFloat64(v) }

func bigNew() *big.Float { return new(big.Float).SetPrec(bigBits) }

// bigLog is log x by 2 atanh((x-1)/(x+1)), after halving x into [1, 2).
func bigLog(x *big.Float) *big.Float {
	m := bigNew()
	e := x.MantExp(m)
	m.SetMantExp(m, 1) // [1, 2)
	r := atanhTwice(bigNew().Quo(bigNew().Sub(m, bigOf(1)), bigNew().Add(m, bigOf(1))))
	ln2 := atanhTwice(bigNew().Quo(bigOf(1), bigOf(3)))
	return r.Add(r, ln2.Mul(ln2, bigOf(float64(e-1))))
}

func atanhTwice(t *big.Float) *big.Float {
	sum, power, z := bigNew(), bigNew().Set(t), bigNew().Mul(t, t)
	for n := 1.0; n < 400; n += 2 {
		sum.Add(sum, bigNew().Quo(power, bigOf(n)))
		power.Mul(power, z)
	}
	return sum.Mul(sum, bigOf(2))
}

// bigPi is Machin's 16 arctan(1/5) - 4 arctan(1/239).
func bigPi() *big.Float {
	arctan := func(inv float64) *big.Float {
		sum, power := bigNew(), bigNew().Quo(bigOf(1), bigOf(inv))
		for n, sign := 1.0, 1.0; n < 400; n, sign = n+2, -sign {
			sum.Add(sum, bigNew().Quo(power, bigOf(sign*n)))
			power.Quo(power, bigOf(inv*inv))
		}
		return sum
	}
	p := bigNew().Mul(bigOf(16), arctan(5))
	return p.Sub(p, bigNew().Mul(bigOf(4), arctan(239)))
}

func off(t *testing.T, what string, got dd, want *big.Float, tol float64) {
	t.Helper()
	d := bigNew().Add(bigOf(got.hi), bigOf(got.lo))
	d.Sub(d, want)
	if v, _ := d.Float64(); !(math.Abs(v) <= tol) {
		t.Errorf("%s is off by %g", what, v)
	}
}

func TestTablesByBigFloats(t *testing.T) {
	for i, row := range logTable {
		l := bigLog(bigOf(row[0]))
		off(t, "logTable", dd{row[1], row[2]}, l.Neg(l), 1e-32)
		if math.Abs(row[0]*float64(i+181)/256-1) > 1e-15 {
			t.Errorf("logTable[%d] is for %v", i, row[0])
		}
	}
	root := bigOf(2)
	for range 7 {
		root.Sqrt(root)
	}
	power := bigOf(1)
	for _, row := range expTable {
		off(t, "expTable", dd{row[0], row[1]}, power, 1e-31)
		power = bigNew().Mul(power, root)
	}
	ln2 := bigLog(bigOf(2))
	off(t, "ln 2", twoSum(ln2Head, ln2Mid), bigNew().Sub(ln2, bigOf(ln2Tail)), 1e-32)

	half := bigOf(0.5)
	logFactorial := bigNew()
	log2Pi := bigLog(bigNew().Mul(bigOf(2), bigPi()))
	for k := 1; k < len(stirlingTable); k++ {
		x := bigOf(float64(k))
		l := bigLog(x)
		logFactorial.Add(logFactorial, l)
		s := bigNew().Sub(logFactorial, bigNew().Mul(bigNew().Add(x, half), l))
		s.Add(s, x)
		s.Sub(s, bigNew().Mul(half, log2Pi))
		off(t, "stirlingTable", dd{stirlingTable[k], 0}, s, 1e-17)
		if k > 40 {
			off(t, "stirlingSeries", dd{stirlingSeries(float64(k)), 0}, s, 1e-17)
		}
	}
}

// A rule of n points is exact for powers to 2n-1.
func TestGaussTables(t *testing.T) {
	for _, rule := range [][][2]float64{gaussTable[:], shortGauss[:]} {
		for m := range 2 * len(rule) {
			sum := 0.0
			for _, r := range rule {
				sum += r[1] * math.Pow(r[0], float64(m))
			}
			if e := sum*float64(m+1) - 1; math.Abs(e) > 1e-14 {
				t.Errorf("%d points, power %d: off by %g", len(rule), m, e)
			}
		}
	}
}

// waveTable by its recursion v v' = z (1 + alpha v - beta v^2) at a few values.
func TestWaveTable(t *testing.T) {
	for _, c := range [][2]float64{{0.3, 0}, {-0.2, 0.01}, {0, 0.04}, {0.5, 0.05}} {
		v, s := make([]float64, 14), make([]float64, 15)
		v[1], s[2] = 1, 1
		for m := 2; m < 13; m++ {
			s[m+1] = 2 / float64(m+1) * (c[0]*v[m-1] - c[1]*s[m-1])
			v[m] = s[m+1]
			for i := 2; i < m; i++ {
				v[m] -= v[i] * v[m+1-i]
			}
			v[m] /= 2
		}
		w := []float64{1}
		for j := 1; j < 12; j++ {
			x := 0.0
			for i := 1; i <= j; i++ {
				x -= v[i+1] * w[j-i]
			}
			w = append(w, x)
		}
		for j, got := range wave(c[0], c[1], 6) {
			if math.Abs(got-w[j]) > 1e-14 {
				t.Errorf("alpha, beta = %v: w[%d] = %g, want %g", c, j, got, w[j])
			}
		}
	}
}

func TestErfcxTable(t *testing.T) {
	for y := -0.5; y < 5; y += 0.0137 {
		if want := math.Exp(y*y) * math.Erfc(y); math.Abs(erfcx(y)/want-1) > 1e-14 {
			t.Errorf("erfcx(%g) = %.17g, want %.17g", y, erfcx(y), want)
		}
	}
	for y := 5.0; y < 1e5; y *= 1.1 { // the continued fraction
		c := 0.0
		for n := 200.0; n > 0; n-- {
			c = n / 2 / (y + c)
		}
		if want := 1 / math.Sqrt(math.Pi) / (y + c); math.Abs(erfcx(y)/want-1) > 1e-15 {
			t.Errorf("erfcx(%g) = %.17g, want %.17g", y, erfcx(y), want)
		}
	}
}

func TestLogAndExp(t *testing.T) {
	for x := 1e-300; x < 1e300; x *= 41.7 {
		a := dd{x, x * 3e-17}
		l := a.log()
		want := bigLog(bigNew().Add(bigOf(a.hi), bigOf(a.lo)))
		off(t, "log", l, want, 4e-24)
		back := expTwo(l.hi, l.lo)
		if math.Abs(back/x-1) > 3e-16 {
			t.Errorf("exp(log %g) = %g", x, back)
		}
	}
	for _, d := range []float64{1e-3, -1e-3, 1e-9, -1e-9, 1e-17, -1e-17, 1e-300} {
		got := log1pOf(d)
		if want := math.Log1p(d); math.Abs(got/want-1) > 3e-16 {
			t.Errorf("log1p(%g) = %g, want %g", d, got, want)
		}
	}
	for y := -30.0; y < 30; y += 0.0173 {
		if got, want := expm1Of(y), math.Expm1(y); math.Abs(got/want-1) > 6e-16 {
			t.Errorf("expm1(%g) = %.17g, want %.17g", y, got, want)
		}
	}
}
