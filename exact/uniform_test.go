package exact

import (
	"math"
	"math/rand/v2"
	"testing"
)

// The uniform expansion against the integral panel, where both hold.
func TestUniformAgainstPanel(t *testing.T) {
	r := rand.New(rand.NewPCG(5, 6))
	worst := [3]float64{}
	for range 40000 {
		sd := uniformFrom * math.Exp(r.Float64()*r.Float64()*8)
		k := math.Ceil(sd * sd)
		z := 38 * r.Float64() * r.Float64()
		if r.IntN(8) == 0 {
			z *= 1e-4
		}
		mu := dd{k - z*sd*(1-z/sd/4), 0}
		c := dd{k - 1, 0}.add(mu.neg()).float()
		a := k * panel(c, k-1, -1, 0, 0, min(1, reach(c, k-1)))
		worst[0] = math.Max(worst[0], math.Abs(poissonUniform(false, k, mu)/a-1))
		mu = dd{k + z*sd*(1+z/sd/4), 0}
		c = mu.addFloat(-k).float()
		a = mu.hi * panel(c, k, 1, 0, 0, reach(c, k))
		worst[1] = math.Max(worst[1], math.Abs((1+poissonUniform(true, k, mu))/a-1))

		x := math.Exp(-r.Float64() * 12)
		if r.IntN(3) == 0 {
			x = 1 - x
		}
		x = min(x, 1-1e-4)
		n := math.Ceil(sd * sd / (x * (1 - x)))
		k = math.Ceil(n * x)
		p := dd{(k - z*sd) / n, 0}
		q := twoSum(1, -p.hi)
		w := p.div(q)
		c = q.mulFloat(k-1).add(p.mulFloat(n-k).neg()).float() / q.hi
		tt := reach(c, (k-1)+(n-k)*w.hi*w.hi)
		if n > maxCount || p.hi <= 0 || k*tt < directTerms {
			continue
		}
		a = k * panel(c, k-1, -1, n-k, w.hi, min(tt, 1))
		worst[2] = math.Max(worst[2], math.Abs(binomialUniform(k, n, p)/a-1))
	}
	t.Logf("largest relative differences: Poisson upper %.2g, lower %.2g, binomial %.2g", worst[0], worst[1], worst[2])
	for _, e := range worst {
		if e > 4e-15 {
			t.Errorf("%v", worst)
			break
		}
	}
}
