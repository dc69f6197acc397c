package replay

import (
	"cmp"
	"slices"

	"tailbell/monitor"
	"tailbell/monitor/life"
)

// Result is what a replay came to.
type Result struct {
	// Steps are all steps of all alerts, by time, indicator and series.
	Steps []life.Notice
	// Refused are the refusals in the order of their rows; the tape knows the
	// place of each by its position.
	Refused    []monitor.Refusal
	Account    monitor.Account
	Conditions []monitor.Condition
	// Clock is where the replay ended, Beginning if no row told a time; NextDue
	// when the next looks are due, if HasNext.
	Clock, NextDue monitor.Instant
	HasNext        bool
	// Watched says what each window of each series was looked at, in order of
	// the series.
	Watched []monitor.Watched
	// Groups is how many engines played, and Whole why it was one; "" if the
	// tape was divided.
	Groups  int
	Whole   string
	mostIDs int
}

// part is what one engine found.
type part struct {
	steps      []life.Notice
	refused    []monitor.Refusal
	account    monitor.Account
	conditions []monitor.Condition
	clock      monitor.Instant
	due        monitor.Instant
	hasDue     bool
	watched    []monitor.Watched
	mostIDs    int
}

func (x *part) take(e *monitor.Engine) {
	f := e.Findings()
	x.steps = append(x.steps, f.Steps...)
	x.refused = append(x.refused, f.Refused...)
}

func (x *part) finish(e *monitor.Engine) {
	x.account, x.conditions, x.clock, x.watched, x.mostIDs = e.Account(), e.Conditions(), e.Clock(), e.Watched(), e.MostIDs()
	x.due, x.hasDue = e.NextDue()
}

// merge puts together what the parts found.
func (p *plan) merge(parts []*part) *Result {
	r := &Result{Clock: monitor.Beginning, NextDue: monitor.Never, Groups: len(parts), Whole: p.whole}
	for i, x := range parts {
		if i == 0 {
			r.Account = x.account
		} else {
			settings := r.Account.Settings
			r.Account = r.Account.Add(x.account)
			r.Account.Settings = settings // each engine took the same one
		}
		r.Refused = append(r.Refused, x.refused...)
		r.Conditions = append(r.Conditions, x.conditions...)
		r.Watched = append(r.Watched, x.watched...)
		r.Clock = max(r.Clock, x.clock)
		if x.hasDue {
			r.NextDue, r.HasNext = min(r.NextDue, x.due), true
		}
		r.mostIDs += x.mostIDs
	}
	slices.SortStableFunc(r.Refused, func(a, b monitor.Refusal) int { return cmp.Compare(a.Position, b.Position) })
	slices.SortFunc(r.Conditions, func(a, b monitor.Condition) int {
		return cmp.Or(cmp.Compare(a.Series, b.Series), cmp.Compare(a.Kind, b.Kind), cmp.Compare(a.Window, b.Window))
	})
	slices.SortStableFunc(r.Watched, func(a, b monitor.Watched) int {
		return cmp.Compare(p.tape.number[a.Series], p.tape.number[b.Series])
	})
	r.Steps = p.mergeSteps(parts)
	return r
}

// mergeSteps orders the steps by their time, and those of the same time by
// indicator and series; those of one series keep their order.
func (p *plan) mergeSteps(parts []*part) []life.Notice {
	type keyed struct {
		at        int64
		indicator int
		series    int32
		notice    *life.Notice
	}
	indicators := map[string]int{}
	for i := range p.setup.Indicators {
		indicators[p.setup.Indicators[i].Name] = i
	}
	var list []keyed
	latest := map[int32]int64{}
	for _, x := range parts {
		for i := range x.steps {
			n := &x.steps[i]
			series := p.tape.number[n.Record.Series]
			at := n.Step.At.UnixMicro()
			if last, ok := latest[series]; ok {
				at = max(at, last)
			}
			latest[series] = at
			list = append(list, keyed{at, indicators[n.Record.Indicator], series, n})
		}
	}
	slices.SortStableFunc(list, func(a, b keyed) int {
		return cmp.Or(cmp.Compare(a.at, b.at), cmp.Compare(a.indicator, b.indicator), cmp.Compare(a.series, b.series))
	})
	steps := make([]life.Notice, len(list))
	for i, k := range list {
		steps[i] = *k.notice
	}
	return steps
}
