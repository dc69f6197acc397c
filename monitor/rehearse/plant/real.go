package plant

import (
	"cmp"
	"encoding/json"
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"

	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/life"
)

// real plants excesses in a history that was observed.
type real struct {
	plan    *Plan
	in      *config.Indicator
	longest int
	clock   monitor.Instant
	series  []*past // those with room for the excess
	all     []*past
	known   []Episode
	alerts  [][]life.Record // of each set-up, without anything planted
}

// past is the history of one series.
type past struct {
	name     string
	arrivals []arrival
	slots    []slot
	control  []run // one for each set-up
	// first is the earliest slot in which an excess may begin.
	first, last int
	years       float64 // looked at outside known episodes
}

// Observe rehearses on a real history: its messages in order, and the episodes
// known in it.
func (p *Plan) Observe(messages []monitor.Message, known []Episode) (*Rehearsal, error) {
	if err := p.check(); err != nil {
		return nil, err
	}
	in, err := p.indicator(0)
	if err != nil {
		return nil, err
	}
	x := &real{plan: p, in: in, known: known, clock: monitor.Beginning}
	for setup := range p.Setups {
		other, err := p.indicator(setup)
		if err != nil {
			return nil, err
		}
		if lastTrials(other) {
			return nil, ErrTrials
		}
		x.longest = max(x.longest, longestOf(other, in))
	}
	byName := map[string]*past{}
	for setup := range p.Setups {
		if err := x.replay(setup, messages, byName); err != nil {
			return nil, err
		}
	}
	x.gather(messages, byName)
	x.settle()
	return &Rehearsal{plan: p, grounds: x, real: x}, nil
}

// replay runs the engine over the history as it is, and keeps what it found
// and, for the first set-up, what the slots hold in the end.
func (x *real) replay(setup int, messages []monitor.Message, byName map[string]*past) error {
	alone, err := x.plan.alone(setup)
	if err != nil {
		return err
	}
	e := monitor.New(monitor.Partition{Of: 1, KeyParts: alone.KeyParts})
	e.Apply(&monitor.Message{Position: 1, Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: alone}})
	of := func(series string) *past {
		s := byName[series]
		if s == nil {
			s = &past{name: series, control: make([]run, len(x.plan.Setups))}
			byName[series] = s
			x.all = append(x.all, s)
		}
		return s
	}
	e.OnLook(func(v monitor.View) { of(v.Series).control[setup].note(&v, v.Series) })
	records := map[string]life.Record{}
	var sums []monitor.SlotSum
	for i := range messages {
		m := messages[i]
		m.Position = uint64(i) + 2
		e.Apply(&m)
		if i%512 != 0 && i+1 < len(messages) {
			continue
		}
		changes := e.Drain()
		for _, a := range changes.Archived {
			var s monitor.SlotSum
			if err := json.Unmarshal(a.Data, &s); err != nil {
				return fmt.Errorf("an archived slot can't be read: %w", err)
			}
			sums = append(sums, s)
		}
		for i := range changes.Steps {
			of(changes.Steps[i].Record.Series).control[setup].step(&changes.Steps[i], changes.Steps[i].Record.Series)
		}
		for _, r := range changes.Alerts {
			records[r.ID] = r
		}
	}
	var alerts []life.Record
	for _, r := range records {
		alerts = append(alerts, r)
	}
	slices.SortFunc(alerts, func(a, b life.Record) int { return cmp.Or(a.Opened.Compare(b.Opened), cmp.Compare(a.ID, b.ID)) })
	x.alerts = append(x.alerts, alerts)
	if setup == 0 {
		x.clock = e.Clock()
		x.fill(append(sums, e.Slots()...), of)
	}
	return nil
}

// fill takes what the slots hold in the end.
func (x *real) fill(sums []monitor.SlotSum, of func(string) *past) {
	cal := monitor.NewCalendar(x.in.Every, x.in.Zone)
	held := map[*past]map[int64]monitor.SlotSum{}
	for _, s := range sums {
		p := of(s.Series)
		if held[p] == nil {
			held[p] = map[int64]monitor.SlotSum{}
		}
		held[p][cal.Slot(s.Start)] = s
	}
	for p, slots := range held {
		first, last := int64(math.MaxInt64), int64(math.MinInt64)
		for n := range slots {
			first, last = min(first, n), max(last, n)
		}
		if x.in.Events == config.Each && x.in.Exposure == config.Clock {
			last = max(last, cal.Slot(x.clock)-1)
		}
		for n := first; n <= last; n++ {
			p.slots = append(p.slots, x.slotOf(cal, n, slots[n]))
		}
	}
}

// slotOf is a slot as it stands in the end; mean is its exposure until the
// usual rate is known, and negative where a side is missing.
func (x *real) slotOf(cal *monitor.Calendar, n int64, sum monitor.SlotSum) slot {
	s := slot{start: cal.Start(n), end: cal.Start(n + 1), events: sum.Events, mean: -1}
	s.known = s.end
	hasEvents := sum.HasEvents || x.in.Events == config.Each
	switch {
	case !hasEvents:
	case x.in.Exposure == config.Clock:
		c := x.in.Clock
		s.mean = float64(c.Size.Coef) / math.Pow10(int(c.Size.Digits)) * float64(s.end-s.start) / 1e6 / c.Per.Seconds()
	case sum.HasExposure:
		if f, err := strconv.ParseFloat(sum.Exposure, 64); err == nil {
			s.mean = f
		}
		if n, err := strconv.ParseInt(sum.Exposure, 10, 64); err == nil {
			s.trials = n
		}
	}
	return s
}

// gather shares out the observations to the series that they touch: by its id
// one observation may move from one to another.
func (x *real) gather(messages []monitor.Message, byName map[string]*past) {
	together := slices.ContainsFunc(x.in.Baselines, func(b config.Baseline) bool { return b.Kind == config.Peers }) ||
		x.in.Allowance != nil && x.in.Allowance.PerIndicator
	touched := map[idOf][]string{}
	x.each(messages, func(_ monitor.Instant, o *monitor.Observation) {
		if key := keyOf(o); o.ID != "" && !slices.Contains(touched[key], o.Series) {
			touched[key] = append(touched[key], o.Series)
		}
	})
	var all []arrival
	x.each(messages, func(at monitor.Instant, o *monitor.Observation) {
		if together {
			all = append(all, arrival{at: at, o: *o})
			return
		}
		names := []string{o.Series}
		if o.ID != "" {
			names = touched[keyOf(o)]
		}
		for _, name := range names {
			if p := byName[name]; p != nil {
				p.arrivals = append(p.arrivals, arrival{at: at, o: *o})
			}
		}
	})
	if together {
		for _, p := range x.all {
			p.arrivals = all
		}
	}
}

// idOf is an id under its site.
type idOf struct{ site, id string }

func keyOf(o *monitor.Observation) idOf {
	site, _, _ := strings.Cut(o.Series, "/")
	return idOf{site, o.ID}
}

// each calls use for the observations of the indicator, with the moment at
// which each became known.
func (x *real) each(messages []monitor.Message, use func(at monitor.Instant, o *monitor.Observation)) {
	for i := range messages {
		m := &messages[i]
		for j := range m.Items {
			it := &m.Items[j]
			if it.Reason != "" || !x.in.Matches(it.Observation.Series) {
				continue
			}
			at := m.Time
			if !m.HasTime {
				at = it.Observation.HistoryTime()
			}
			use(at, &it.Observation)
		}
	}
}

// settle finds the usual rate of each series, when its slots were known, and
// where an excess has room.
func (x *real) settle() {
	slices.SortFunc(x.all, func(a, b *past) int { return cmp.Compare(a.name, b.name) })
	for _, p := range x.all {
		base := x.in.BaselineFor(p.name)
		p.knownAt()
		rate := x.usual(p, base)
		for i := range p.slots {
			s := &p.slots[i]
			if s.mean < 0 || base == nil {
				continue
			}
			factor := base.Strata.At(s.start.Time().In(x.in.Zone))
			if x.in.Measure == config.Proportion {
				odds := factor * rate / (1 - rate)
				s.mean = odds / (1 + odds)
				continue
			}
			s.mean *= rate * factor
		}
		p.first, p.last = x.longest, len(p.slots)-x.plan.Length
		for p.last >= p.first && p.slots[p.last+x.plan.Length-1].end.Add(x.in.Settle) > x.clock {
			p.last--
		}
		if p.first < len(p.slots) {
			p.years = float64(x.clock-p.slots[p.first].start) / 1e6 / Year.Seconds()
			for _, k := range x.known {
				if k.Series.Match(p.name) {
					p.years -= overlap(p.slots[p.first].start, x.clock, monitor.InstantOf(k.From), monitor.InstantOf(k.To)) / Year.Seconds()
				}
			}
			p.years = max(p.years, 0)
		}
		if base != nil && p.first <= p.last && rate > 0 {
			x.series = append(x.series, p)
		}
	}
}

// overlap is the length in seconds that two spans share.
func overlap(a, b, c, d monitor.Instant) float64 { return max(0, float64(min(b, d)-max(a, c))) / 1e6 }

// knownAt finds when each slot was first told of: when its events became known,
// else its exposure, else at its end.
func (p *past) knownAt() {
	told := make([]int, len(p.slots))
	for i := range p.arrivals {
		a := &p.arrivals[i]
		n, _ := slices.BinarySearchFunc(p.slots, a.o.Start, func(s slot, t monitor.Instant) int {
			if s.end <= t {
				return -1
			}
			return 1
		})
		if n >= len(p.slots) || p.slots[n].start > a.o.Start || a.o.Series != p.name {
			continue
		}
		if s := &p.slots[n]; a.o.HasEvents && told[n] < 2 {
			s.known, told[n] = max(a.at, s.end), 2
		} else if a.o.HasExposure && told[n] < 1 {
			s.known, told[n] = max(a.at, s.end), 1
		}
	}
}

// usual is the rate relative to which an excess is planted: the baseline's, or
// where that is counted from the history, the series' own outside known episodes.
func (x *real) usual(p *past, base *config.Baseline) float64 {
	switch {
	case base == nil:
		return 0
	case base.Kind == config.Known:
		return base.Rate
	case base.Kind == config.Reference:
		return float64(base.Events) / (float64(base.Exposure.Coef) / math.Pow10(int(base.Exposure.Digits)))
	}
	events, exposure := int64(0), 0.0
	for i := range p.slots {
		if s := &p.slots[i]; s.mean > 0 && !x.labelled(p.name, s.start, s.end) {
			events += s.events
			exposure += s.mean * base.Strata.At(s.start.Time().In(x.in.Zone))
		}
	}
	if exposure == 0 {
		return 0
	}
	return float64(events) / exposure
}

// labelled reports whether a span of a series overlaps a known episode.
func (x *real) labelled(series string, from, to monitor.Instant) bool {
	return slices.ContainsFunc(x.known, func(k Episode) bool {
		return k.Series.Match(series) && from < monitor.InstantOf(k.To) && monitor.InstantOf(k.From) < to
	})
}

// ground chooses a place for the excess: a series, and a span in it that holds
// no missing slot and no known episode.
func (x *real) ground(number int) (*ground, error) {
	rng := x.plan.source(uint64(number) << 8)
	if len(x.series) == 0 {
		return nil, fmt.Errorf("%w: no series of %s is known for %d slots before it and %d for it", ErrRoom, x.in.Name, x.longest, x.plan.Length)
	}
	const tries = 2000
	for range tries {
		p := x.series[rng.IntN(len(x.series))]
		at := p.first + rng.IntN(p.last-p.first+1)
		slots := p.slots[at : at+x.plan.Length]
		before := p.slots[at-x.longest]
		if slices.ContainsFunc(slots, func(s slot) bool { return s.mean < 0 }) ||
			x.labelled(p.name, before.start, slots[len(slots)-1].end) {
			continue
		}
		g := &ground{series: p.name, base: p.arrivals, slots: slots, from: slots[0].start, to: slots[len(slots)-1].end}
		g.until = min(x.clock, p.slots[min(at+x.plan.Length+x.longest, len(p.slots))-1].end.Add(x.in.Settle))
		return g, nil
	}
	return nil, fmt.Errorf("%w: in %d tries every place held a missing slot or a known episode", ErrRoom, tries)
}
