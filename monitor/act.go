package monitor

import (
	"fmt"
	"slices"
	"time"

	"tailbell/monitor/life"
)

// act takes something that a person did, or refuses it with the reason.
func (e *Engine) act(m *Message) {
	if e.history && !m.HasTime && m.Act.HasAt {
		e.advance(m.Act.At)
	}
	if !m.Act.Kind.OnSeries() && e.putOff(&m.Act, m.Position) {
		return
	}
	if reason, detail := e.perform(&m.Act); reason != "" {
		e.account.ActsRefused++
		e.refuse(m, 0, m.Act.Series, reason, detail, m.Act.Raw)
		return
	}
	e.account.Acts++
}

func (e *Engine) perform(act *Act) (Reason, string) {
	if act.Kind.OnSeries() {
		return e.performOnSeries(act)
	}
	a := e.alertOf(act)
	if a == nil {
		if act.Alert != "" {
			return NoSuchAlert, fmt.Sprintf("no act can reach alert %q: it is unknown here, or done and beyond the horizon", act.Alert)
		}
		return NoSuchAlert, fmt.Sprintf("series %q has no %s alert that is not done", act.Series, act.Direction)
	}
	if taken := InstantOf(a.record.Steps[0].At); act.HasAt && act.At < taken {
		return NotAllowed, fmt.Sprintf("the act of %s is older than alert %s, which opened %s: it was meant for another one, or was sent again",
			at(act.At), a.record.ID, at(taken))
	}
	s := life.Step{At: e.clock.Time(), By: act.By, Why: act.Why, Mark: act.Mark}
	switch act.Kind {
	case Acknowledge:
		s.Kind = life.StepAcknowledged
	case Close:
		s.Kind = life.StepClosed
	case Note:
		s.Kind = life.StepNote
	case Mark:
		s.Kind = life.StepMarked
	case Shelve:
		s.Kind = life.StepShelved
		if why := e.unshelvable(act.Until); why != "" {
			return NotAllowed, why
		}
		until := act.Until.Time()
		s.Until = &until
	case Unshelve:
		s.Kind = life.StepUnshelved
	case Reset, Change, OutOfService, BackInService, SignOff:
	}
	if repeated(&a.record, act, &s) {
		if s.Kind == life.StepAcknowledged {
			return NotAllowed, fmt.Sprintf("alert %s was acknowledged already", a.record.ID)
		}
		return NotAllowed, fmt.Sprintf("alert %s has this act already", a.record.ID)
	}
	if err := e.take(a, s); err != nil {
		return NotAllowed, err.Error()
	}
	if act.Kind == Mark && a.tail != silence {
		a.series.mark(a, act.Mark)
	}
	if t := a.series.tail(a.tail); act.Kind == Close && t.current == a {
		t.leave(a.series.indicator.looked)
		t.disarmed = true
	}
	return "", ""
}

// repeated reports whether the record holds the act already: an acknowledgement
// of any kind, or one with its own time that says the same.
func repeated(r *life.Record, act *Act, s *life.Step) bool {
	if s.Kind == life.StepAcknowledged {
		return r.Acknowledged()
	}
	return slices.ContainsFunc(r.Steps, func(old life.Step) bool {
		return old.Kind == s.Kind && act.HasAt && old.At.Equal(act.At.Time()) &&
			old.By == s.By && old.Why == s.Why && old.Mark == s.Mark && sameTime(old.Until, s.Until)
	})
}

func sameTime(a, b *time.Time) bool {
	return a == b || (a != nil && b != nil && a.Equal(*b))
}

// alertOf finds the alert that an act names: by its id, or the newest one of
// the series and direction that is not done.
func (e *Engine) alertOf(act *Act) *alert {
	if act.Alert != "" {
		a := e.alerts[act.Alert]
		if a == nil || a.gone() {
			return nil
		}
		return a
	}
	s := e.byName[act.Series]
	if s == nil {
		return nil
	}
	t := &s.tails[upper]
	switch act.Direction {
	case life.Lower:
		t = &s.tails[lower]
	case life.Silence:
		t = s.tail(silence)
	case life.Upper:
	}
	if t.current != nil {
		return t.current
	}
	var newest *alert
	for _, a := range t.past {
		if !a.record.Done() && (newest == nil || a.record.Number > newest.record.Number) {
			newest = a
		}
	}
	return newest
}
