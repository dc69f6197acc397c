package report

import (
	"math"
	"time"

	"tailbell/alert/figure"
	"tailbell/config"
	"tailbell/monitor"
)

// Play gives the engine the next message of a history, and takes the looks that
// it puts beyond change. Clock ticks between messages, one for each time at
// which looks fall due, keep them from leaving the engine's memory untaken; they
// change nothing else.
func (r *Recorder) Play(e *monitor.Engine, m monitor.Message) {
	for i := range m.Items {
		if m.Items[i].Reason == "" {
			r.Meet(m.Items[i].Observation.Series)
		}
	}
	for m.HasTime {
		due, any := e.NextDue()
		if !any || due >= m.Time {
			r.harvest(e, m.Time)
			break
		}
		r.harvest(e, due)
		e.Apply(&monitor.Message{Position: e.Position() + 1, Kind: monitor.Tick, Stored: due, Time: due, HasTime: true})
	}
	r.moved(m.Position, e.Position()+1)
	m.Position = e.Position() + 1
	e.Apply(&m)
}

// harvest takes the looks that what comes at that moment, or later, can't change.
func (r *Recorder) harvest(e *monitor.Engine, at monitor.Instant) {
	for i := range r.setup.Indicators {
		in := &r.setup.Indicators[i]
		if h := r.harvests[in.Name]; h != nil {
			if until := at.Add(-in.Horizon); until > h.next {
				r.take(e, in, h, until)
			}
		}
	}
}

func (r *Recorder) take(e *monitor.Engine, in *config.Indicator, h *harvest, until monitor.Instant) {
	for _, name := range h.series {
		for _, w := range in.Windows {
			for _, v := range e.Views(name, w.Name, h.taken.Time(), until.Time()) {
				r.look(&v)
			}
		}
	}
	h.taken, h.next = until, h.cal.Start(h.cal.Slot(until-1)+1)
}

// harvest says which looks of an indicator were taken: those before taken. Looks
// at events lie within slots, too; next is the boundary from which on it is worth
// to take more.
type harvest struct {
	taken  monitor.Instant
	next   monitor.Instant
	cal    *monitor.Calendar
	series []string // in order of their names
}

func newHarvest(in *config.Indicator) *harvest {
	first := monitor.InstantOf(time.Date(1, 1, 1, 0, 0, 0, 0, time.UTC))
	return &harvest{taken: first, next: first, cal: monitor.NewCalendar(in.Every, in.Zone)}
}

// look takes a look as the data stand.
func (r *Recorder) look(v *monitor.View) {
	n := r.made[v.Indicator]
	if v.Made {
		n[0]++
	} else {
		n[1]++
	}
	r.made[v.Indicator] = n
	if r.from.IsZero() || v.Due.Before(r.from) {
		r.from = v.Due
	}
	if v.Due.After(r.to) {
		r.to = v.Due
	}
	k := key{v.Indicator, v.Series, v.Window}
	r.looks[k] = append(r.looks[k], pointOf(v))
	p := 0.0
	for _, t := range []*monitor.ViewTail{&v.Upper, &v.Lower} {
		if t.Watched && v.Made {
			p = min(p, t.Log10P)
		}
	}
	r.worst[k] = append(r.worst[k], p)
}

func pointOf(v *monitor.View) figure.Point {
	p := figure.Point{
		At: v.End, Events: v.Events, Expected: v.Expected, Made: v.Made, Provisional: v.Provisional > 0, Late: v.Late > 0,
		Signals: v.Upper.Signals, SignalsLow: v.Lower.Signals,
		Critical: v.Upper.Critical, HasCritical: v.Upper.HasCritical, Floor: v.Lower.Critical, HasFloor: v.Lower.HasCritical,
		Rate: math.NaN(), Lower: math.NaN(), Upper: math.NaN(), Usual: math.NaN(),
	}
	if !v.Made {
		p.Why = v.Status
	}
	return p
}
