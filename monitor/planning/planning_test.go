package planning

import (
	"context"
	"math"
	"reflect"
	"testing"

	"tailbell/config"
	"tailbell/exact"
	"tailbell/monitor/allowance"
)

func ward() *Question {
	return &Question{
		Names: []string{"28d", "84d"}, Every: config.Every{N: 1, Unit: config.Day},
		Plan: allowance.Plan{
			Law: allowance.Law{Rate: 0.0018}, Exposure: 22, Windows: []allowance.Window{{Slots: 28, Step: 1, Slot: true}, {Slots: 84, Step: 7, Slot: true}},
			Upper: true, SlotsPerYear: 365.2425, PerYear: 0.2, Starts: 0.2,
		},
	}
}

func answer(t *testing.T, q *Question, o Options) *Report {
	t.Helper()
	r, err := Answer(context.Background(), q, o)
	if err != nil {
		t.Fatal(err)
	}
	return r
}

// TestFound: the ratios are those at which a Poisson count of the window reaches
// the critical count with the chance.
func TestFound(t *testing.T) {
	r := answer(t, ward(), Options{Seed: 1, Draws: 100, Ratios: []float64{3}})
	for i, p := range r.Parts {
		mean := 0.0018 * 22 * []float64{28, 84}[i]
		if math.Abs(p.Expected-mean) > 1e-12 {
			t.Errorf("%s: %v expected, want %v", p.Window, p.Expected, mean)
		}
		for _, f := range p.Found {
			if want := exact.MeanLower(*p.Critical, f.Chance) / mean; f.Ratio == nil || math.Abs(*f.Ratio-want) > 1e-9*want {
				t.Errorf("%s: %v with chance %v, want %v", p.Window, *f.Ratio, f.Chance, want)
			}
		}
		if p.Fewer == nil || p.More == nil || p.Fewer.Critical != *p.Critical-1 || p.More.Critical != *p.Critical+1 ||
			p.Fewer.PerYear <= p.PerYear || p.More.PerYear >= p.PerYear {
			t.Errorf("%s: %d, one fewer %+v, one more %+v", p.Window, *p.Critical, p.Fewer, p.More)
		}
	}
}

// TestDelayExact compares simulated delays with laws that are known: a window of
// one slot signals with the same chance at each look (geometric), and the first
// slot of a longer one with that of past and present together.
func TestDelayExact(t *testing.T) {
	q := ward()
	q.Names, q.Plan.Windows = []string{"1d"}, []allowance.Window{{Slots: 1, Step: 1, Slot: true}}
	q.Plan.Law.Rate, q.PLimit = 0.05, 1e-3
	const draws = 4000
	r := answer(t, q, Options{Seed: 7, Draws: draws, Ratios: []float64{2}})
	k := *r.Parts[0].Critical
	chance := exact.Poisson{Rate: 2.2, Exposure: 1}.Upper(k)
	d := r.Parts[0].Delays[0]
	for share, q := range map[float64]Quantile{0.5: d.Half, 0.9: d.Most} {
		want := int(math.Ceil(math.Log(1-share) / math.Log1p(-chance)))
		if q.Lower == nil || q.Upper == nil || *q.Lower-1 > want || *q.Upper+1 < want {
			t.Errorf("the quantile %v lies at %v (%v to %v), want %d", share, *q.Slots, *q.Lower, *q.Upper, want)
		}
	}
	if !reflect.DeepEqual(r.Delays[0], d) {
		t.Errorf("of one window: %+v; of any: %+v", d, r.Delays[0])
	}
}

// TestDelayUnchanged: at a ratio of one the first signals come as crossings are
// predicted, over all laws and ways to look.
func TestDelayUnchanged(t *testing.T) {
	questions := map[string]func(*Question){
		"steady":     func(*Question) {},
		"spread":     func(q *Question) { q.Plan.Law.Spread = 1.5 },
		"cycle":      func(q *Question) { q.Plan.Cycle = []float64{1.4, 1.4, 1.3, 1.2, 1.1, 0.3, 0.3} },
		"delay":      func(q *Question) { q.Plan.Known = []float64{0.1, 0.3, 0.6, 0.8, 0.9} },
		"arrival":    func(q *Question) { q.Plan.Windows = []allowance.Window{{Slots: 28, Step: 1, Arrival: true}} },
		"proportion": func(q *Question) { q.Plan.Law = allowance.Law{Rate: 0.01, Proportion: true}; q.Plan.Exposure = 5 },
		"trials": func(q *Question) {
			q.Plan.Law, q.Plan.Exposure = allowance.Law{Rate: 0.01, Proportion: true}, 6
			q.Plan.Volume, q.Plan.Windows = 5.3, []allowance.Window{{Trials: 150, Arrival: true}}
		},
		"lower": func(q *Question) { q.Plan.Upper, q.Plan.Lower = false, true; q.Plan.Law.Rate = 0.012 },
	}
	for name, change := range questions {
		q := ward()
		q.Plan.Windows, q.Names = q.Plan.Windows[:1], q.Names[:1]
		change(q)
		q.Plan.PerYear, q.Plan.Starts = 0.02, 0
		limits, err := q.Limits()
		if err != nil {
			t.Fatal(err)
		}
		const draws = 3000
		r := answer(t, q, Options{Seed: 11, Draws: draws, Ratios: []float64{1 + 1e-12}})
		// Crossings so rare come one at a time or in small clumps: of the first of
		// each clump there are fewer.
		d := r.Parts[0].Delays[0]
		years := float64(d.Horizon) / q.Plan.SlotsPerYear
		most := 1 - math.Exp(-limits.PerYear*years)
		if q.Plan.Lower {
			most += r.Parts[0].Size // of windows that signal when it begins
		}
		most += r.Parts[0].Size
		if d.ShareLower > most || d.ShareUpper < most/4 {
			t.Errorf("%s: %d of %d signal within %.2f years (%v to %v); predicted are %v", name, d.Found, d.Draws, years, d.ShareLower, d.ShareUpper, most)
		}
	}
}

// TestDelayRepeats: the seed decides, not the processors.
func TestDelayRepeats(t *testing.T) {
	o := Options{Seed: 3, Draws: 300, Ratios: []float64{2, 5}}
	if a, b := answer(t, ward(), o), answer(t, ward(), o); !reflect.DeepEqual(a, b) {
		t.Errorf("%+v\n%+v", a, b)
	}
}

// TestAdvice: windows of no use say so.
func TestAdvice(t *testing.T) {
	q := ward()
	q.Plan.Lower = true
	r := answer(t, q, Options{Seed: 1, Draws: 10, Ratios: []float64{2}})
	if p := r.Parts[1]; p.Critical != nil || p.Advice == "" || p.Delays[0].Found != 0 || p.Found[0].Ratio != nil {
		t.Errorf("28 days with 1.1 expected, too few: %+v", p)
	}
	q = ward()
	q.Plan.Law.Rate, q.PLimit = 1e-6, 1e-3
	r = answer(t, q, Options{Seed: 1, Draws: 10, Ratios: []float64{2}})
	if p := r.Parts[0]; p.Critical == nil || *p.Critical != 1 || p.Advice == "" {
		t.Errorf("next to nothing expected: %+v", p)
	}
}
