package monitor

import (
	"math"
	"slices"
	"time"

	"tailbell/monitor/life"
)

// Glance is a series at its latest looks, in short: what lists are sorted by.
type Glance struct {
	Series, Indicator string
	// Look is the latest look of the window with the strongest evidence; its
	// Window is "" where no look fell due yet.
	Look View
	// Direction is the tail of that evidence and Log10P its p; 0 where no look
	// was made.
	Direction life.Direction
	Log10P    float64
	// Signals says that the latest made look of some window signals.
	Signals bool
	// Unalerted are the tails that signal while no alert of them does; ByHand
	// says that one was closed by hand, so that none opens in some of them
	// before enough looks are quiet.
	Unalerted []life.Direction
	ByHand    bool
	// Seen is when an observation was last counted.
	Seen Instant
	// Conditions stand of the series.
	Conditions []Condition
}

// Glances calls f for at most n series from the number first on, in the order
// in which they appeared, and returns the number to go on with, 0 at the end.
// What it does is bounded by n, so that it can be called between messages.
func (e *Engine) Glances(first, n int, f func(Glance)) int {
	end := min(first+n, len(e.series))
	for i := max(first, 0); i < end; i++ {
		if s := e.series[i]; !s.retired {
			f(e.glance(s))
		}
	}
	if end >= len(e.series) {
		return 0
	}
	return end
}

// SeriesCount is how many series are monitored.
func (e *Engine) SeriesCount() int { return e.living }

func (e *Engine) glance(s *series) Glance {
	ix := s.indicator
	g := Glance{
		Series: s.name, Indicator: ix.cfg.Name, Seen: s.seen, Conditions: e.conditionsOf(s),
	}
	for _, d := range bothTails {
		if !s.active(d) {
			continue
		}
		g.Signals = true
		if t := &s.tails[d]; t.current == nil {
			g.Unalerted = append(g.Unalerted, d.name())
			g.ByHand = g.ByHand || t.disarmed
		}
	}
	if !ix.started || s.birth == unborn {
		return g
	}
	for _, p := range ix.now().windows {
		b := ix.latest(p.Window)
		if b < p.since {
			continue
		}
		ep := ix.epochAt(b)
		var v View
		if !ep.cfg.SlotLooks || p.Trials > 0 {
			v = e.arrivalViewAt(s, p.place, e.latestArrival(s))
		} else if l := ix.look(s, ep, p.place, b, e.momentOf(s, b, p.place)); l.status != filling {
			v = ix.view(s, ep, &l)
		}
		if v.Window == "" {
			continue
		}
		direction, log10p := sharper(&v)
		if g.Look.Window == "" || log10p < g.Log10P {
			g.Look, g.Direction, g.Log10P = v, direction, log10p
		}
	}
	return g
}

// sharper is the tail with the smaller p.
func sharper(v *View) (life.Direction, float64) {
	direction, log10p := life.Upper, 0.0
	if v.Upper.Watched && v.Upper.Log10P < log10p {
		log10p = v.Upper.Log10P
	}
	if v.Lower.Watched && v.Lower.Log10P < log10p {
		direction, log10p = life.Lower, v.Lower.Log10P
	}
	return direction, log10p
}

// Latest returns the latest n looks of a window of a series at boundaries up
// to a moment, oldest first, as Views does.
func (e *Engine) Latest(series, window string, until time.Time, n int) []View {
	s := e.byName[series]
	if s == nil || n <= 0 {
		return nil
	}
	ix := s.indicator
	latest := ix.cal.Start(ix.looked)
	if s.arrivals != nil { // looks were made since
		latest = max(latest, e.clock)
	}
	to := min(InstantOf(until), latest)
	for w := range ix.cfg.Windows {
		if cfg := &ix.cfg.Windows[w]; cfg.Name == window && cfg.Trials > 0 {
			return e.latestOfTrials(s, window, to, n)
		} else if cfg.Name == window {
			first := ix.cal.Slot(to) - int64(n)*int64(cfg.Step) + 1
			views := e.Views(series, window, ix.cal.Start(first).Time(), (to + 1).Time())
			return views[max(len(views)-n, 0):]
		}
	}
	return nil
}

// Standing returns the evidence of the latest look of a window that can be
// made, as an alert would hold it, whether it signals or not; false where there
// is none.
func (e *Engine) Standing(series, window string) (life.Evidence, bool) {
	s := e.byName[series]
	if s == nil || s.birth == unborn || !s.indicator.started {
		return life.Evidence{}, false
	}
	ix := s.indicator
	p := ix.named(window)
	if p == nil {
		return life.Evidence{}, false
	}
	if !ix.cfg.SlotLooks || p.Trials > 0 {
		return e.arrivalStanding(s, p.place)
	}
	w, b := p.place, ix.latest(p.Window)
	if b < p.since {
		return life.Evidence{}, false
	}
	if ix.spanFrom(s, b, p.Slots) < max(s.begin(b), p.whole) || ix.statusAt(s, w, b) != made {
		var ok bool
		if b, ok = ix.previous(s, w, b); !ok {
			return life.Evidence{}, false
		}
	}
	ep := ix.epochAt(b)
	l := ix.look(s, ep, w, b, e.momentOf(s, b, w))
	u, based := ix.usualAt(s, ep, b)
	if l.status != made || l.exposure.IsZero() || !based {
		return life.Evidence{}, false
	}
	if o := ix.opportunity(s, &u, &l.tally, ix.spanFrom(s, b, p.Slots), b, l.at); o.weighted == 0 {
		return life.Evidence{}, false
	}
	v := ix.view(s, ep, &l)
	d := upper
	if tail, _ := sharper(&v); tail == life.Lower || !ep.cfg.Upper {
		d = lower
	}
	ev := e.evidence(s, d, b, w)
	ev.Chosen = v.Upper.Signals || v.Lower.Signals
	return ev, true
}

// SlotView is one slot of a series as shown to people.
type SlotView struct {
	Start, End time.Time // in the indicator's zone
	// Events, of which Late came after the slot had settled, if HasEvents; else
	// they are absent, which is not zero. The same for Exposure.
	Events, Late int64
	HasEvents    bool
	Exposure     string
	HasExposure  bool
	// Provisional says that the exposure was carried forward, Settled that the
	// slot no longer waits for late data.
	Provisional, Settled bool
}

// SlotsOf returns the latest n slots of a series that have begun, the latest
// first.
func (e *Engine) SlotsOf(series string, n int) []SlotView {
	s := e.byName[series]
	if s == nil || s.birth == unborn || e.clock == Beginning {
		return nil
	}
	s.catchUp()
	ix := s.indicator
	last := ix.cal.Slot(e.clock)
	if s.sum != nil {
		last = ix.looked - 1
	}
	if k := len(s.cells); k > 0 {
		last = max(last, s.cells[k-1].slot)
	}
	first := max(last-int64(n)+1, s.birth, s.trimmed)
	if last < first {
		return nil
	}
	views := make([]SlotView, last-first+1)
	for i := range views {
		slot := last - int64(i)
		v := &views[i]
		v.Start, v.End = ix.cal.Start(slot).in(ix.cfg.Zone), ix.cal.Start(slot+1).in(ix.cfg.Zone)
		v.Settled = slot < ix.looked
		v.Events, v.HasEvents = ix.eventsOf(s, slot)
		if j, ok := s.cells.find(slot); ok {
			v.Late = s.cells[j].late
		}
	}
	ix.eachExposure(s, first, last+1, func(slot int64, q Quantity, provisional bool) {
		v := &views[last-slot]
		v.Exposure, v.HasExposure, v.Provisional = q.decimal(ix.cfg.GrainDigits), true, provisional
	})
	return views
}

// Dated is a moment at which something changed by which a series is judged.
type Dated struct {
	At   time.Time `json:"at"` // in the indicator's zone
	What string    `json:"what"`
}

// ChangesOf returns the changes that looks in memory have passed: new versions
// of the set-up, and where one baseline followed another.
func (e *Engine) ChangesOf(series string) []Dated {
	s := e.byName[series]
	if s == nil {
		return nil
	}
	ix := s.indicator
	var all []Dated
	for i := 1; i < len(ix.epochs); i++ {
		ep := &ix.epochs[i]
		if ep.from > math.MinInt64 && ep.from <= ix.looked {
			all = append(all, Dated{ix.cal.Start(ep.from).in(ix.cfg.Zone), "set-up " + ep.digest[:min(12, len(ep.digest))] + " in force"})
		}
	}
	for i := range ix.cfg.Baselines {
		b := &ix.cfg.Baselines[i]
		if b.From.IsZero() || !b.Serves(series) || InstantOf(b.From) > ix.cal.Start(ix.looked) {
			continue
		}
		what := "another baseline"
		if b.Version != "" {
			what = "baseline " + b.Version
		}
		all = append(all, Dated{b.From.In(ix.cfg.Zone), what})
	}
	all = append(all, e.factsOf(ix, series)...)
	slices.SortStableFunc(all, func(a, b Dated) int { return a.At.Compare(b.At) })
	return all
}

// Decimal writes the exposure of the look exactly.
func (v *View) Decimal() string { return v.Exposure.decimal(v.Digits) }

// GlanceOf returns one series at a glance; false where there is none.
func (e *Engine) GlanceOf(series string) (Glance, bool) {
	s := e.byName[series]
	if s == nil {
		return Glance{}, false
	}
	return e.glance(s), true
}
