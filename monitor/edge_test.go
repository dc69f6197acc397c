package monitor

import (
	"math"
	"math/rand/v2"
	"testing"

	"tailbell/config"
	"tailbell/exact"
)

// TestEdges compares looks decided by the edges of their counts with the tests
// themselves, for all laws that have edges, around the limit and at it.
func TestEdges(t *testing.T) {
	const seed = 7
	t.Logf("seed %d", seed)
	rng := rand.New(rand.NewPCG(seed, 1))
	decided, lits := 0, 0
	for range 60 {
		u, d := randomUsual(rng)
		x := &edges{key: edgeKey{u.base, u.limit[d], d}, u: *u}
		for range 200 {
			o := opportunity{exposure: math.Ceil(math.Exp(rng.Float64() * 9))}
			o.weighted = o.exposure
			events := int64(rng.ExpFloat64() * 10)
			if u.cfg.Measure == config.Proportion {
				events = min(events, int64(o.exposure))
			}
			p := newLaw(u, d, &o)
			tail := p.Upper(events)
			if d == lower {
				tail = p.Lower(events)
			}
			want := exact.AtMost(tail, u.limit[d])
			got, sure := x.signals(&o, events)
			if sure && got != want {
				t.Fatalf("%+v %+v, direction %d: %d in %v signals %v, but p is %v, edge %v", *u.base, u.ref, d, events, o.exposure, got, tail, x.at[events])
			}
			if sure {
				decided++
			}
			if want {
				lits++
			}
		}
	}
	if decided < 8000 || lits < 1000 {
		t.Errorf("only %d looks were decided by edges, %d signalled", decided, lits)
	}
}

func randomUsual(rng *rand.Rand) (*usual, direction) {
	cfg := &config.Indicator{Measure: config.Measure(rng.IntN(2)), Upper: true, Lower: true}
	b := &config.Baseline{Kind: config.BaselineKind(rng.IntN(2)), Rate: 0.3 * rng.Float64(), Margin: 1 + float64(rng.IntN(2))*0.3, Spread: 1}
	u := &usual{cfg: cfg, base: b}
	if b.Kind == config.Reference {
		u.ref = &reference{events: int64(rng.IntN(60)), weighted: 200}
	} else if cfg.Measure == config.Rate && rng.IntN(2) == 0 {
		b.Spread = 2
	}
	limit := math.Pow(10, -4*rng.Float64()) / 2
	u.limit = [2]float64{limit, limit}
	return u, direction(rng.IntN(2))
}
