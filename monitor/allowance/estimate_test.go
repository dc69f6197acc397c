package allowance

import (
	"math"
	"testing"

	"tailbell/exact"
)

// integrate is Simpson's rule over the logarithm of the rate (log odds), against
// the density's own formula.
func integrate(density, f func(x float64) float64, from, to float64) float64 {
	const steps = 6000
	h := (to - from) / steps
	sum := 0.0
	for i := range steps + 1 {
		w := 2.0
		switch {
		case i == 0 || i == steps:
			w = 1
		case i%2 == 1:
			w = 4
		}
		x := from + float64(i)*h
		if d := density(x); d > 0 {
			sum += w * d * f(x)
		}
	}
	return sum * h / 3
}

func lgamma(x float64) float64 {
	l, _ := math.Lgamma(x)
	return l
}

// TestAveragedRate holds crossings averaged over Gamma(M+1, F) and Gamma(M, F)
// against a fine quadrature of the density.
func TestAveragedRate(t *testing.T) {
	for _, events := range []int64{0, 1, 5, 36, 1000} {
		for _, tail := range []Tail{Upper, Lower} {
			if events == 0 && tail == Lower {
				continue
			}
			p := Plan{
				Law: Law{Estimated: true, Events: events, Exposure: 100}, Exposure: 100. / 28 * 20 / float64(20+events),
				Windows: []Window{{Slots: 28, Step: 1, Slot: true}}, Upper: true, Lower: events > 0, SlotsPerYear: 365,
			}
			shape := float64(events)
			if tail == Upper {
				shape++
			}
			density := func(x float64) float64 { // of log(r F)
				return math.Exp(shape*x - math.Exp(x) - lgamma(shape))
			}
			turn := p.turn(p.Windows[0], 0)
			m := newModel(&p, tail, p.load(0, 0, p.Windows[0].Slots, p.known))
			for _, alpha := range []float64{0.1, 1e-2, 1e-4, 1e-7} {
				c := m.critical(turn.now, alpha)
				if !c.ok {
					continue
				}
				at := func(x float64) float64 { return m.crossesAt(math.Exp(x)/100, &turn, c, c) }
				want := integrate(density, at, math.Log(shape)-40/math.Sqrt(shape), math.Log(shape)+min(6, 20/math.Sqrt(shape)))
				if got := m.crosses(&turn, c, c); math.Abs(got-want) > 1e-8*want {
					t.Errorf("%d events, tail %d, limit %v: %v, integrated %v", events, tail, alpha, got, want)
				}
			}
		}
	}
}

// TestAveragedTails: averaged over what the estimate leaves open, a tail is the
// conditional test's p-value; that is why a limit on p holds for every kind of
// baseline.
func TestAveragedTails(t *testing.T) {
	for _, law := range []Law{
		{Estimated: true, Events: 3, Exposure: 50},
		{Estimated: true, Events: 40, Exposure: 50, Margin: 1.2},
		{Estimated: true, Events: 3, Exposure: 50, Proportion: true},
		{Estimated: true, Events: 40, Exposure: 500, Proportion: true},
	} {
		p := Plan{Law: law, Exposure: 2, Upper: true, Lower: true, Windows: []Window{{Slots: 10, Step: 1, Slot: true}}, SlotsPerYear: 1}
		window := p.load(0, 0, 10, p.known)
		for _, tail := range []Tail{Upper, Lower} {
			m := newModel(&p, tail, p.load(0, 0, p.Windows[0].Slots, p.known))
			for k := range int64(12) {
				want := m.size(window, k)
				if got := m.signals(window, k); math.Abs(got-want) > 1e-8*want {
					t.Errorf("%+v, tail %d, %d: %v on average, p is %v", law, tail, k, got, want)
				}
			}
		}
	}
}

// TestAveragedProportion holds the same against the Beta laws.
func TestAveragedProportion(t *testing.T) {
	p := Plan{
		Law: Law{Estimated: true, Events: 6, Exposure: 200, Proportion: true}, Exposure: 5,
		Windows: []Window{{Slots: 12, Step: 1, Slot: true}}, Upper: true, Lower: true, SlotsPerYear: 12,
	}
	turn := p.turn(p.Windows[0], 0)
	for _, tail := range []Tail{Upper, Lower} {
		a, b := 7.0, 194.0
		if tail == Lower {
			a, b = 6, 195
		}
		density := func(x float64) float64 { // of the log odds
			theta := 1 / (1 + math.Exp(-x))
			return math.Exp(a*math.Log(theta) + b*math.Log1p(-theta) + lgamma(a+b) - lgamma(a) - lgamma(b))
		}
		m := newModel(&p, tail, p.load(0, 0, p.Windows[0].Slots, p.known))
		for k := range int64(8) {
			c := critical{k, true}
			at := func(x float64) float64 { return m.crossesAt(1/(1+math.Exp(-x)), &turn, c, c) }
			want := integrate(density, at, -12, 2)
			if got := m.crosses(&turn, c, c); math.Abs(got-want) > 1e-7*want {
				t.Errorf("tail %d, %d: %v, integrated %v", tail, k, got, want)
			}
		}
	}
}

// TestClusters: messages of logarithmic size make negative binomial counts in
// any span.
func TestClusters(t *testing.T) {
	x := part{plan: &Plan{Law: Law{Spread: 1.7}}}
	for _, v := range []struct {
		mean float64
		k    int64
	}{{0.2, 9}, {3, 9}, {2000, 2100}} { // exp(-2000) underflows
		got := newHeld(x.messages(v.mean, v.k), v.k).atLeast(v.k)
		if want := exact.NewNegativeBinomial(v.mean, 1, 1.7).Upper(v.k); math.Abs(got-want) > 1e-12 {
			t.Errorf("mean %v: %v, negative binomial %v", v.mean, got, want)
		}
	}
}
