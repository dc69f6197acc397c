package plant

import (
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"strconv"
	"strings"
	"time"

	"tailbell/config"
	"tailbell/exact/resample"
	"tailbell/monitor"
)

// Invention says how histories are invented.
type Invention struct {
	// Series is the name of the series; "" makes one of the indicator's first
	// pattern.
	Series string
	// Exposure of every slot (trials for a proportion), where the indicator
	// has it reported.
	Exposure config.Decimal
	// Years are looked at, beside the time that windows and baselines take to
	// fill.
	Years float64
	// Rate is the true rate per unit of exposure, or the true proportion; 0
	// takes the baseline's.
	Rate float64
	// Drawn draws each history's true rate from what a reference leaves open,
	// Gamma(M+1, F) (Gamma(M, F) where only the lower tail is watched; the Beta
	// law likewise for a proportion), instead of taking its estimate for true.
	Drawn bool
	// Peers is how many other series there are, for a baseline from peers, or
	// for an allowance over all series, which they share.
	Peers int
	// Begin is when the first slot begins; zero takes the indicator's own
	// beginning, the baseline's, or 2001.
	Begin time.Time
}

// invented makes histories out of nothing but the set-up.
type invented struct {
	plan     *Plan
	in       *config.Indicator
	base     *config.Baseline
	how      Invention
	names    []string // the first is the one in which the excess is planted
	starts   []monitor.Instant
	exposure []float64 // of each slot
	factor   []float64 // of the usual rate (odds) in each slot
	warm     int       // slots before the first look that counts
	longest  int
	moments  bool // of trials, see slot
	// place, if not nil, is the slot in which every excess begins, for tests.
	place *int
}

// Invent rehearses on invented histories.
func (p *Plan) Invent(how Invention) (*Rehearsal, error) {
	if err := p.check(); err != nil {
		return nil, err
	}
	v, err := newInvented(p, how)
	if err != nil {
		return nil, err
	}
	r := &Rehearsal{plan: p, grounds: v, invented: v}
	return r, r.prepare()
}

func newInvented(p *Plan, how Invention) (*invented, error) {
	in, err := p.indicator(0)
	if err != nil {
		return nil, err
	}
	v := &invented{plan: p, in: in, how: how}
	if err := v.name(); err != nil {
		return nil, err
	}
	begin := how.Begin
	switch {
	case !begin.IsZero():
	case !in.Since.IsZero():
		begin = in.Since
	default:
		begin = time.Date(2001, 1, 1, 0, 0, 0, 0, in.Zone)
		for i := range in.Baselines {
			if b := &in.Baselines[i]; !b.From.IsZero() && b.Series.Match(v.names[0]) {
				begin = b.From
				break
			}
		}
	}
	if v.base = in.BaselineFor(v.names[0]); v.base == nil {
		return nil, fmt.Errorf("no baseline of %s serves the series %s: name one that is served", in.Name, v.names[0])
	}
	if err := v.checkRate(); err != nil {
		return nil, err
	}
	for setup := range p.Setups {
		other, err := p.indicator(setup)
		if err != nil {
			return nil, err
		}
		v.longest = max(v.longest, longestOf(other, in), v.trialSlots(other))
		v.moments = v.moments || lastTrials(other)
		for i := range other.Baselines {
			if b := &other.Baselines[i]; b.Kind == config.Trailing || b.Kind == config.Peers {
				v.warm = max(v.warm, b.SpanSlots+b.GapSlots)
			}
		}
	}
	v.warm += v.longest
	return v, v.lay(begin)
}

// longestOf is the longest window of an indicator, in slots of another one.
func longestOf(in, slots *config.Indicator) int {
	longest := 0
	for i := range in.Windows {
		longest = max(longest, in.Windows[i].Slots)
	}
	if in.Every == slots.Every {
		return longest
	}
	from := monitor.InstantOf(time.Date(2001, 1, 1, 0, 0, 0, 0, slots.Zone))
	theirs, ours := monitor.NewCalendar(in.Every, in.Zone), monitor.NewCalendar(slots.Every, slots.Zone)
	to := theirs.Start(theirs.Slot(from) + int64(longest) + 1)
	return int(ours.Slot(to)-ours.Slot(from)) + 1
}

func (v *invented) name() error {
	n := 1 + v.how.Peers
	for i := range v.in.Baselines {
		if b := &v.in.Baselines[i]; b.Kind == config.Peers && v.how.Peers < 1 {
			return errors.New("a baseline from peers needs other series: say how many")
		}
	}
	for i := range n {
		name := v.how.Series
		if name == "" {
			name = strings.ReplaceAll(v.in.Series[0].String(), "**", "*")
			name = strings.ReplaceAll(name, "*", strconv.Itoa(i+1))
		} else if i > 0 {
			name += "-" + strconv.Itoa(i+1)
		}
		if !v.in.Matches(name) || v.in.BaselineFor(name) == nil {
			return fmt.Errorf("a series of the name %s is not monitored by %s, or no baseline serves it: name one", name, v.in.Name)
		}
		v.names = append(v.names, name)
	}
	return nil
}

func (v *invented) checkRate() error {
	in, how := v.in, v.how
	learned := v.base.Kind == config.Trailing || v.base.Kind == config.Peers
	switch {
	case learned && how.Rate == 0:
		return errors.New("the baseline is counted from the history itself: say what the true rate is")
	case how.Rate < 0 || math.IsNaN(how.Rate) || in.Measure == config.Proportion && how.Rate >= 1:
		return fmt.Errorf("a true rate of %g can't be", how.Rate)
	case how.Drawn && (v.base.Kind != config.Reference || how.Rate > 0):
		return errors.New("a true rate is drawn from what a reference leaves open: the baseline is none, or the rate is given")
	case in.Exposure != config.Clock && how.Exposure.Coef == 0:
		return fmt.Errorf("the exposure of a slot is missing: how many %s are there in each?", in.Unit)
	case in.Exposure == config.Clock && how.Exposure.Coef != 0:
		return errors.New("the indicator takes its exposure from the clock: leave it out")
	case in.Measure == config.Proportion && how.Exposure.Digits > 0:
		return errors.New("trials are whole numbers")
	case int(how.Exposure.Digits) > in.GrainDigits:
		return fmt.Errorf("an exposure of %s is finer than the indicator's grain", how.Exposure.String())
	case !(how.Years > 0) || how.Years > 1000:
		return errors.New("the years that are looked at lie between 0 and 1,000")
	}
	return nil
}

// lay reckons the slots of all histories.
func (v *invented) lay(begin time.Time) error {
	cal := monitor.NewCalendar(v.in.Every, v.in.Zone)
	first := cal.Slot(monitor.InstantOf(begin))
	if cal.Start(first) < monitor.InstantOf(begin) {
		first++
	}
	until := cal.Start(first + int64(v.warm)).Add(time.Duration(v.how.Years * float64(Year)))
	for n := first; ; n++ {
		start := cal.Start(n)
		v.starts = append(v.starts, start)
		if start >= until && len(v.starts) > v.warm+v.plan.Length {
			break
		}
		if len(v.starts) > 10_000_000 {
			return errors.New("a history of so many slots is too long to rehearse: take fewer years")
		}
		hours := float64(cal.Start(n+1)-start) / 3.6e9
		exposure := float64(v.how.Exposure.Coef) / math.Pow10(int(v.how.Exposure.Digits))
		if c := v.in.Clock; v.in.Exposure == config.Clock {
			exposure = float64(c.Size.Coef) / math.Pow10(int(c.Size.Digits)) * hours / c.Per.Hours()
		}
		v.exposure = append(v.exposure, exposure)
		v.factor = append(v.factor, v.base.Strata.At(start.Time().In(v.in.Zone)))
	}
	return nil
}

// rate draws the true rate of one history.
func (v *invented) rate(rng *rand.Rand) float64 {
	b := v.base
	switch {
	case v.how.Rate > 0:
		return v.how.Rate
	case b.Kind == config.Known:
		return b.Rate
	}
	m, f := float64(b.Events), float64(b.Exposure.Coef)/math.Pow10(int(b.Exposure.Digits))
	if !v.how.Drawn {
		return m / f
	}
	a := m
	if v.in.Upper {
		a = m + 1
	}
	a = max(a, 0.5)
	if v.in.Measure == config.Rate {
		return resample.Gamma(rng, a) / f
	}
	x, y := resample.Gamma(rng, a), resample.Gamma(rng, max(f+1-a, 0.5))
	return x / (x + y)
}

// ground invents the history of that number.
func (v *invented) ground(number int) (*ground, error) {
	rng := v.plan.source(uint64(number) << 8)
	n := len(v.exposure)
	at := v.warm + rng.IntN(n-v.warm-v.plan.Length+1)
	if v.place != nil {
		at = *v.place
	}
	g := &ground{
		series: v.names[0], judged: v.starts[v.warm] - 1,
		from: v.starts[at], to: v.starts[at+v.plan.Length], until: v.starts[n],
	}
	rate := v.rate(rng)
	for i := range n {
		for k, name := range v.names {
			s := v.slot(i, rate)
			s.events = v.draw(rng, &s)
			g.base = append(g.base, v.report(name, &s, i, rng)...)
			if k == 0 && i >= at && i < at+v.plan.Length {
				g.slots = append(g.slots, s)
			}
		}
	}
	sortArrivals(g.base)
	return g, nil
}

func (v *invented) slot(i int, rate float64) slot {
	// A look due at the end of a slot is made before what is stored then.
	s := slot{start: v.starts[i], end: v.starts[i+1], known: v.starts[i+1] - 1}
	if v.in.Measure == config.Proportion {
		odds := v.factor[i] * rate / (1 - rate)
		s.mean, s.trials = odds/(1+odds), int64(v.how.Exposure.Coef)
		return s
	}
	s.mean = rate * v.factor[i] * v.exposure[i]
	return s
}

func (v *invented) draw(rng *rand.Rand, s *slot) int64 {
	if v.in.Measure == config.Proportion {
		return countTrials(rng, s.trials, s.mean, v.base.Spread)
	}
	return count(rng, s.mean, v.base.Spread)
}

// report returns the observations of a slot.
func (v *invented) report(name string, s *slot, i int, rng *rand.Rand) []arrival {
	o := monitor.Observation{Series: name, Start: s.start, End: s.end, Events: s.events, HasEvents: true}
	if v.in.Exposure != config.Clock {
		o.Exposure, o.HasExposure = v.how.Exposure, true
	}
	silent := v.in.Events == config.Each && v.in.Exposure == config.Clock && i > 0
	if v.moments {
		return trials(name, s, rng)
	}
	if v.in.ArrivalLooks {
		list := instants(name, s, s.events, rng)
		if o.Events = 0; !silent {
			list = append(list, arrival{at: s.known, o: o})
		}
		return list
	}
	late := splitDelay(v.base, s.events, rng)
	var list []arrival
	for j, k := range late {
		age := v.base.Delay.Ages[j]
		if o.Events -= k; age == 0 {
			o.Events += k
		} else if k > 0 {
			list = append(list, arrival{at: s.known.Add(age), o: events(name, s, k)})
		}
	}
	if o.Events == 0 && silent {
		return list
	}
	return append(list, arrival{at: s.known, o: o})
}
