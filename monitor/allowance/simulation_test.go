package allowance

import (
	"flag"
	"fmt"
	"math"
	"math/rand/v2"
	"strings"
	"testing"

	"tailbell/exact/resample"
)

var table = flag.Bool("allowance.table", false, "simulate at least 10,000 crossings a cell, and print the table of README.md")

// cell is one kind of series whose alerts are counted in a simulated life.
type cell struct {
	name     string
	plan     Plan
	exposure func(r *rand.Rand, slot int) float64 // nil: as planned
	life     int                                  // slots after which it begins anew; 0: never
}

func day(rate float64, windows ...Window) Plan {
	for i := range windows {
		windows[i].Slot = true
	}
	return Plan{Law: Law{Rate: rate}, Exposure: 1, Windows: windows, Upper: true, SlotsPerYear: 365.2425, PerYear: 2, Starts: 0.1}
}

func cells() []cell {
	with := func(p Plan, change func(p *Plan)) Plan {
		change(&p)
		return p
	}
	week := []float64{1.3, 1.2, 1.2, 1.2, 1.1, 0.5, 0.5}
	return []cell{
		{name: "rate, 7 slots, mean 0.1", plan: day(0.1/7, Window{Slots: 7, Step: 1})},
		{name: "rate, 28 slots, mean 2", plan: day(2./28, Window{Slots: 28, Step: 1})},
		{name: "rate, 365 slots, mean 50", plan: day(50./365, Window{Slots: 365, Step: 1})},
		{name: "rate, 28 slots, mean 8, too few", plan: with(day(8./28, Window{Slots: 28, Step: 1}), func(p *Plan) { p.Upper, p.Lower = false, true })},
		{
			name: "rate, 7, 28 and 84 slots (weekly), both tails",
			plan: with(day(0.2, Window{Slots: 7, Step: 1}, Window{Slots: 28, Step: 1}, Window{Slots: 84, Step: 7}), func(p *Plan) { p.Lower = true }),
		},
		{name: "rate by weekday, 10 slots, mean 2", plan: with(day(0.2, Window{Slots: 10, Step: 1}), func(p *Plan) { p.Cycle = week })},
		{name: "proportion 0.01, 28 slots of 20", plan: with(day(0, Window{Slots: 28, Step: 1}), func(p *Plan) { p.Law, p.Exposure = Law{Rate: 0.01, Proportion: true}, 20 })},
		{
			name: "rate, 28 slots, mean 2, at random 30 % more or less", plan: with(day(2./28, Window{Slots: 28, Step: 1}), func(p *Plan) { p.Vary = 0.3 }),
			exposure: func(r *rand.Rand, _ int) float64 { return 0.7 + 0.6*r.Float64() },
		},
		{
			name: "rate, 28 slots, mean 2, 30 % more and less in turn by weeks", plan: with(day(2./28, Window{Slots: 28, Step: 1}), func(p *Plan) { p.Vary = 0.3 }),
			exposure: func(_ *rand.Rand, slot int) float64 { return 0.7 + 0.6*float64(slot/7%2) },
		},
		{name: "rate, 28 slots, mean 2, reported slowly", plan: with(day(2./28, Window{Slots: 28, Step: 1}), func(p *Plan) { p.Known = []float64{0.1, 0.3, 0.5, 0.7, 0.8, 0.9} })},
		{name: "rate, 28 slots, mean 2, spread 1.5", plan: with(day(2./28, Window{Slots: 28, Step: 1}), func(p *Plan) { p.Law.Spread = 1.5 })},
		{
			name: "rate, 28 slots, mean 2, lives of 60 slots", plan: with(day(2./28, Window{Slots: 28, Step: 1}), func(p *Plan) { p.Starts = 365.2425 / 60 }),
			life: 60,
		},
		{
			name: "rate, 28 slots, from 36 events in 504, true rate anew each year",
			plan: with(day(0, Window{Slots: 28, Step: 1}), func(p *Plan) { p.Law = Law{Estimated: true, Events: 36, Exposure: 504} }),
		},
	}
}

// simulated draws slots and counts the alerts that open.
type simulated struct {
	cell
	rng    *rand.Rand
	models []*model
	limits *Limits
	alerts int64
	open   int // quiet looks until the open alert has returned; 0: none is open
	rate   float64
	counts []int64
	loads  []float64
	last   map[int]judged // by part
}

// judged is the critical count of an exposure.
type judged struct {
	exposure float64
	critical critical
}

const quietLooks = 7

// run passes so many slots.
func (s *simulated) run(slots int) {
	age := 0
	for t := range slots {
		if s.life > 0 && age == s.life || age == 0 {
			age, s.open, s.counts, s.loads = 0, 0, s.counts[:0], s.loads[:0]
		}
		age++
		if s.plan.Law.Estimated && t%365 == 0 {
			s.rate = resample.Gamma(s.rng, float64(s.plan.Law.Events+1)) / s.plan.Law.Exposure
		}
		s.slot(t)
		signals, made := false, false
		for i := range s.limits.Parts {
			p := &s.limits.Parts[i]
			w := s.plan.Windows[p.Window]
			if len(s.counts) < w.Slots || t%w.Step != 0 {
				continue
			}
			made = true
			signals = s.looks(i, p, w, t) || signals
		}
		switch {
		case signals && s.open == 0:
			s.alerts++
			s.open = quietLooks
		case signals:
			s.open = quietLooks
		case made && s.open > 0:
			s.open--
		}
	}
}

// slot draws the events of slot t, and of those before it what becomes known.
func (s *simulated) slot(t int) {
	e := s.plan.Exposure
	if s.exposure != nil {
		e *= s.exposure(s.rng, t)
	}
	e *= s.plan.factor(t)
	s.loads = append(s.loads, e)
	s.counts = append(s.counts, 0)
	known := 0.0
	for age := 0; age <= len(s.plan.Known) && age < len(s.counts); age++ {
		n := len(s.counts) - 1 - age
		share := s.plan.known(age) - known
		known = s.plan.known(age)
		s.counts[n] += s.draw(float64(s.loads[n] * share))
	}
}

func (s *simulated) draw(e float64) int64 {
	switch law := &s.plan.Law; {
	case law.Proportion:
		return resample.Binomial(s.rng, int64(e), s.rate)
	case law.Spread > 1:
		return resample.Poisson(s.rng, resample.Gamma(s.rng, s.rate*e/(law.Spread-1))*(law.Spread-1))
	default:
		return resample.Poisson(s.rng, s.rate*e)
	}
}

// looks reports whether a window's look signals so that an alert may open.
func (s *simulated) looks(i int, p *Part, w Window, t int) bool {
	n := len(s.counts)
	var sum, entered int64
	exposure := 0.0
	for age := range w.Slots {
		sum += s.counts[n-1-age]
		exposure += s.loads[n-1-age] * s.plan.known(age)
		if age < w.Step {
			entered += s.counts[n-1-age]
		}
	}
	c := s.last[i].critical
	if s.last[i].exposure != exposure {
		c = s.models[i].critical(load{size: exposure}, p.Alpha)
		s.last[i] = judged{exposure, c}
	}
	switch {
	case !c.ok:
		return false
	case p.Tail == Lower:
		return sum <= c.k
	}
	return sum >= c.k && (entered > 0 || s.open > 0 || s.exposure == nil)
}

// TestSimulated counts alerts in long simulated lives, by fixed seeds. No cell may
// open more than predicted beyond four standard errors; joint over the cells and
// seeds that is missed by chance once in a thousand runs of other seeds.
func TestSimulated(t *testing.T) {
	crossings, seeds := 500., 1
	if *table {
		crossings, seeds = 10_000, 3
	}
	var b strings.Builder
	for _, c := range cells() {
		limits, err := Solve(&c.plan)
		if err != nil {
			t.Fatal(err)
		}
		years := crossings / limits.PerYear
		row := fmt.Sprintf("| %s | %s | %.3f |", c.name, limits.Parts[0].Basis, limits.PerYear)
		for seed := range seeds {
			s := simulated{cell: c, rng: resample.Source(uint64(seed+1), 0), limits: &limits, rate: c.plan.Law.Rate, last: map[int]judged{}}
			for _, x := range c.plan.parts() {
				s.models = append(s.models, x.model)
			}
			s.run(int(years * c.plan.SlotsPerYear))
			got := float64(s.alerts) / years
			sd := math.Sqrt(float64(s.alerts)) / years
			row += fmt.Sprintf(" %.3f ± %.3f |", got, sd)
			if got > limits.PerYear+4*sd {
				t.Errorf("%s, seed %d: %v ± %v alerts a year, at most %v are predicted", c.name, seed+1, got, sd, limits.PerYear)
			}
		}
		b.WriteString(row + "\n")
	}
	t.Log("\n" + b.String())
}
