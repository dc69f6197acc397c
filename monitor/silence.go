package monitor

import (
	"cmp"
	queue "container/heap"

	"tailbell/config"
	"tailbell/monitor/life"
)

// A series that must report and does not is silent: an alert of its own kind,
// without evidence, opens at the very moment at which the time is over. It is no
// signal of the lower tail, and looks have no say in it. It returns when the
// series is heard of again.

// SilenceCaution stands on every record of a silence.
const SilenceCaution = "A silence says that nothing was reported, not that nothing happened. " +
	"Local policy, local codes and licensed practice decide."

// deadline is a moment at or after which a series is silent, unless it is heard
// of before. Where it was, the moment is put off when it has come.
type deadline struct {
	at     Instant
	series *series
}

// deadlines is a heap of them, the earliest first.
type deadlines []deadline

func (d deadlines) Len() int      { return len(d) }
func (d deadlines) Swap(i, j int) { d[i], d[j] = d[j], d[i] }

func (d deadlines) Less(i, j int) bool {
	return cmp.Or(cmp.Compare(d[i].at, d[j].at), cmp.Compare(d[i].series.number, d[j].series.number)) < 0
}

// Push appends x; it is called by package heap alone.
func (d *deadlines) Push(x any) {
	if next, ok := x.(deadline); ok {
		*d = append(*d, next)
	}
}

// Pop removes the last one; it is called by package heap alone.
func (d *deadlines) Pop() any {
	old := *d
	last := old[len(old)-1]
	*d = old[:len(old)-1]
	return last
}

// silentAt is when the series will be silent if nothing is heard of it, Never if
// it may be for as long as it likes.
func (s *series) silentAt() Instant {
	if s.retired || s.sum != nil {
		return Never
	}
	within := s.indicator.cfg.SilentFor(s.name)
	heard := s.heardAt()
	if within == 0 || heard == Beginning {
		return Never
	}
	// What was heard while it was out of service makes it no earlier than if it
	// had not been: the wait begins anew when it is back.
	if heard = s.inServiceAfter(heard); heard == Never {
		return Never
	}
	at := heard.Add(within)
	for {
		from := s.inServiceAfter(at)
		if from == at || from == Never {
			return from
		}
		at = from.Add(within)
	}
}

// neverHeard reports whether nothing of the series was ever counted: it is
// expected, or was opened.
func (s *series) neverHeard() bool { return s.birth == unborn || s.seen == 0 }

// heardAt is when something of the series was last counted, or from when on that
// is expected; Beginning if neither is known.
func (s *series) heardAt() Instant {
	switch {
	case s.seen != 0:
		return s.seen
	case s.heir != nil:
		return max(s.indicator.cal.Start(s.heir.until), s.heir.taken)
	case s.birth != unborn:
		return s.indicator.cal.Start(s.birth)
	}
	return Beginning
}

// inServiceAfter is the first moment, not before the given one, at which the
// series is open and not out of service; Never if there is none yet.
func (s *series) inServiceAfter(at Instant) Instant {
	d, ix := s.dates, s.indicator
	if d == nil {
		return at
	}
	slot := ix.cal.Slot(at)
	if !d.isOpen(slot) {
		for _, t := range d.turns { // in order
			if t.open && t.slot > slot {
				return ix.cal.Start(t.slot)
			}
		}
		return Never
	}
	for _, x := range d.outs {
		if x.from <= slot && slot < x.to {
			return ix.cal.Start(x.to)
		}
	}
	return at
}

// awaits puts the series among those whose silence is waited for; one that is closed
// for good is not.
func (e *Engine) awaits(s *series) {
	if e.passing || s.silence.waits() || e.clock != Beginning && s.inServiceAfter(e.clock) == Never {
		return
	}
	if at := s.silentAt(); at != Never {
		queue.Push(&e.deadlines, deadline{at, s})
	}
}

// await does so for all series, and lets end the silences that are none by the
// set-up now in force.
func (e *Engine) await() {
	e.deadlines = nil
	for _, s := range e.series {
		if !s.retired {
			e.awaitAgain(s, NotExpected)
		}
	}
}

// Why a silence ends though nothing was heard.
const (
	NotExpected = "no longer expected so soon"
	NotOpen     = "closed, or out of service"
)

// awaitAgain does so for one series.
func (e *Engine) awaitAgain(s *series, why string) {
	if s.silence != nil && s.silence.current != nil && e.clock < s.silentAt() {
		e.broken(s, why)
	}
	e.awaits(s)
}

// enterExpected makes the series that must report even if nobody ever heard of
// them. They count as heard of at that moment.
func (e *Engine) enterExpected() {
	for _, ix := range e.indicators {
		for i := range ix.cfg.Expect {
			name := ix.cfg.Expect[i].Series
			if !name.Exact() || !e.ours(name.String()) || e.byName[name.String()] != nil || e.living >= e.setup.Limits.MaxSeries {
				continue
			}
			if owner, other := e.indicatorOf(name.String()); owner != ix || other != nil {
				continue // observations of it would be refused as ambiguous
			}
			s := e.enter(ix, name.String())
			s.seen = e.clock
			e.link(s)
			e.inheritAgain(s)
		}
	}
}

// ours reports whether the series belongs to this partition.
func (e *Engine) ours(series string) bool {
	return e.partition.Of <= 1 || config.PartitionOf(series, e.partition.KeyParts, e.partition.Of) == e.partition.Number
}

// awaken lets the time begin, at the first moment of the clock, for series that
// were never heard of.
func (e *Engine) awaken(at Instant) {
	for _, s := range e.series {
		if s.birth == unborn && s.seen == Beginning {
			s.seen = at
			e.touch(s)
			e.awaits(s)
		}
	}
}

// nextDeadline returns the earliest moment at which a series will be silent,
// Never if there is none.
func (e *Engine) nextDeadline() Instant {
	for len(e.deadlines) > 0 {
		first := &e.deadlines[0]
		at := first.series.silentAt()
		if first.series.silence.waits() {
			at = Never
		}
		switch {
		case at == Never:
			queue.Pop(&e.deadlines)
		case at > first.at: // heard of since
			first.at = at
			queue.Fix(&e.deadlines, 0)
		default:
			return first.at
		}
	}
	return Never
}

// fallSilent opens an alert of the silence whose time is over next.
func (e *Engine) fallSilent() {
	first := e.deadlines[0]
	queue.Pop(&e.deadlines)
	s, ix := first.series, first.series.indicator
	t := s.tail(silence)
	t.opened++
	at := first.at.Time()
	a := &alert{
		series: s, tail: silence, first: ix.looked, last: ongoing,
		record: life.Record{
			ID:        alertID(s.name, silence, at, int(t.opened)),
			Indicator: ix.cfg.Name, Title: ix.cfg.Title, Series: s.name, Direction: life.Silence,
			Number: int(t.opened), Opened: at, Zone: ix.cfg.ZoneName, Caution: SilenceCaution,
			Silence: &life.Heard{Within: config.FormatDuration(ix.cfg.SilentFor(s.name))},
		},
	}
	if !s.neverHeard() {
		last := s.seen.Time()
		a.record.Silence.Last = &last
	}
	t.current = a
	e.alerts[a.record.ID] = a
	e.step(a, life.Step{Kind: life.StepOpened, At: at})
}

// heard ends the silence of a series.
func (e *Engine) heard(s *series) {
	if !s.silence.waits() {
		return
	}
	e.broken(s, "")
	e.awaits(s)
}

func (e *Engine) broken(s *series, why string) {
	t := s.tail(silence)
	t.disarmed = false
	if a := t.current; a != nil {
		t.leave(s.indicator.looked)
		e.step(a, life.Step{Kind: life.StepReturned, At: e.clock.Time(), Why: why})
	}
	e.touch(s)
}
