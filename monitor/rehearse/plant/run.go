package plant

import (
	"fmt"

	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/life"
)

// run is what one engine made of one history.
type run struct {
	// opened are the alerts of the series in the order of their opening.
	opened []opening
	// spans are those in which an alert signalled, by their first and last
	// moment; monitor.Never for one that signals still.
	spans []signalling
	// lit are the looks that signal and were made when due, from the moment on
	// from which they were asked for.
	lit []lit
	// refused is the first refusal in words, refusedPlanted how many planted
	// observations were refused.
	refused        string
	refusedPlanted int64
}

// opening is the step that opened an alert.
type opening struct {
	direction life.Direction
	at        monitor.Instant
	from, to  monitor.Instant // of the opening look's window
}

type signalling struct {
	direction life.Direction
	from, to  monitor.Instant
}

// lit is a look that signals.
type lit struct {
	window   string
	up, down bool
	end, due monitor.Instant
}

// judge runs the engine over what arrives, up to the moment until. Looks over
// the span of an excess are noted.
func judge(setup *config.Setup, series string, arrivals []arrival, from, to, until monitor.Instant) *run {
	e := monitor.New(monitor.Partition{Of: 1, KeyParts: setup.KeyParts})
	r := &run{}
	position := uint64(1)
	e.Apply(&monitor.Message{Position: position, Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
	watching := 0
	end := to.Add(setup.Indicators[0].Settle) // when the last look inside it is due
	watch := func(at monitor.Instant) {
		switch {
		case watching == 0 && at > from:
			watching = 1
			e.OnLook(func(v monitor.View) { r.note(&v, series) })
		case watching == 1 && at > end && e.Clock() >= end:
			watching = 2
			e.OnLook(nil)
		}
	}
	item := []monitor.Item{{}}
	for i := range arrivals {
		a := &arrivals[i]
		if a.at > until {
			break
		}
		watch(a.at)
		item[0].Observation = a.o
		position++
		e.Apply(&monitor.Message{Position: position, Kind: monitor.Observations, Items: item, Stored: a.at, Time: a.at, HasTime: true})
	}
	watch(until)
	e.Apply(&monitor.Message{Position: position + 1, Kind: monitor.Tick, Stored: until, Time: until, HasTime: true})
	changes := e.Drain()
	for i := range changes.Refused {
		x := &changes.Refused[i]
		if i == 0 {
			r.refused = fmt.Sprintf("%d in all, the first of %s: %s: %s", len(changes.Refused), x.Series, x.Reason, x.Detail)
		}
		if at := int(x.Position) - 2; at >= 0 && at < len(arrivals) && arrivals[at].planted {
			r.refusedPlanted++
		}
	}
	for i := range changes.Steps {
		r.step(&changes.Steps[i], series)
	}
	return r
}

func (r *run) note(v *monitor.View, series string) {
	if v.Series != series || (!v.Upper.Signals && !v.Lower.Signals) {
		return
	}
	r.lit = append(r.lit, lit{v.Window, v.Upper.Signals, v.Lower.Signals, monitor.InstantOf(v.End), monitor.InstantOf(v.Due)})
}

// step takes a step of an alert.
func (r *run) step(n *life.Notice, series string) {
	if n.Record.Series != series {
		return
	}
	at, direction := monitor.InstantOf(n.Step.At), n.Record.Direction
	switch n.Step.Kind {
	case life.StepOpened:
		ev := &n.Record.Opening
		r.opened = append(r.opened, opening{direction, at, monitor.InstantOf(ev.From), monitor.InstantOf(ev.To)})
		r.spans = append(r.spans, signalling{direction, at, monitor.Never})
	case life.StepReturned, life.StepWithdrawn, life.StepClosed:
		for i := range r.spans {
			if s := &r.spans[i]; s.direction == direction && s.to == monitor.Never {
				s.to = at
			}
		}
	case life.StepWorsened, life.StepCorrected, life.StepAcknowledged, life.StepNote, life.StepMarked,
		life.StepShelved, life.StepUnshelved, life.StepReminder, life.StepTest:
	}
}

// outcome is what a run made of an excess.
type outcome struct {
	inTime, late, masked bool
	from, due            monitor.Instant   // the excess began, and was found if at all
	windows              []monitor.Instant // when each window first signalled in time, or Never
}

// outcomeOf says whether the run found something in the excess's place.
func (r *run) outcomeOf(in *config.Indicator, direction life.Direction, from, to monitor.Instant) outcome {
	o := outcome{from: from, due: monitor.Never}
	for i := range r.opened {
		x := &r.opened[i]
		if x.direction != direction || x.to <= from || x.from >= to || x.at <= from {
			continue
		}
		if !o.inTime && x.to <= to {
			o.inTime, o.late, o.due = true, false, x.at
		} else if !o.inTime && !o.late {
			o.late, o.due = true, x.at
		}
	}
	if !o.inTime && !o.late {
		for _, s := range r.spans {
			o.masked = o.masked || (s.direction == direction && s.from <= from && s.to > from)
		}
	}
	for i := range in.Windows {
		first := monitor.Never
		for _, l := range r.lit {
			if l.window == in.Windows[i].Name && l.end > from && l.end <= to && l.due < first &&
				(direction == life.Upper && l.up || direction == life.Lower && l.down) {
				first = l.due
			}
		}
		o.windows = append(o.windows, first)
	}
	return o
}

// falseAlerts counts the alerts that a run without an excess opened from the
// moment on.
func (r *run) falseAlerts(from monitor.Instant) int64 {
	n := int64(0)
	for i := range r.opened {
		if r.opened[i].at > from {
			n++
		}
	}
	return n
}
