package monitor

import (
	"cmp"
	"slices"

	"tailbell/config"
	"tailbell/monitor/life"
)

// dismiss ends the monitoring of an indicator that the next set-up lacks: its
// alerts close as no longer monitored, with the evidence that they have, what
// its series hold goes to the archive, and what is reported of them from now on
// is unmonitored. Should an indicator claim its name again, it begins anew.
func (e *Engine) dismiss(ix *indicator) {
	e.dismissSeries(ix)
	e.scatter(ix)
	e.endCounts(ix)
	e.recent = nil
	e.pending = slices.DeleteFunc(e.pending, func(a *alert) bool { return !a.pending })
}

func (e *Engine) dismissSeries(ix *indicator) {
	for _, s := range ix.ordered() {
		for d := range s.tails {
			e.dismissAlerts(&s.tails[d], ix)
		}
		if s.silence != nil {
			e.dismissAlerts(s.silence, ix)
		}
		for i := range s.cells {
			c := &s.cells[i]
			if s.sum != nil || s.inherited(c.slot) {
				continue // what it holds is that of others
			}
			if !ix.needs.paired(c) {
				s.unpaired += int64(c.items)
			}
			e.archive(s, c)
		}
		e.end(s, e.clock, true)
	}
	ix.series, ix.sums = nil, nil
}

// dismissAlerts closes what is not done of one direction of a series, in order
// of opening.
func (e *Engine) dismissAlerts(t *tail, ix *indicator) {
	if t.current != nil {
		t.leave(ix.looked)
	}
	slices.SortFunc(t.past, func(a, b *alert) int { return cmp.Compare(a.record.Number, b.record.Number) })
	for _, a := range t.past {
		if !a.record.Done() {
			e.step(a, life.Step{Kind: life.StepClosed, At: e.clock.Time(), Why: life.NoLongerMonitored})
		}
		a.pending = false
		delete(e.alerts, a.record.ID)
	}
}

// gone reports whether the id speaks of a series whose indicator went: then it says
// nothing any more.
func (x *identified) gone() bool { return x.said.series == forgotten }

// dismissed lists the indicators that the next set-up lacks.
func (e *Engine) dismissed(next *config.Setup) []*indicator {
	var list []*indicator
	for _, ix := range e.indicators {
		if !slices.ContainsFunc(next.Indicators, func(in config.Indicator) bool { return in.Name == ix.cfg.Name }) {
			list = append(list, ix)
		}
	}
	return list
}
