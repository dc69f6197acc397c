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
	// Chances sum up the p-values of all looks, if they were asked for.
	Chances []monitor.Chances
	// Groups is how many engines played, and Whole why it was one; "" if the
	// tape was divided.
	Groups  int
	Whole   string
	mostIDs int
}

// part is what one engine found.
type part struct {
	steps      []step
	refused    []monitor.Refusal
	account    monitor.Account
	conditions []monitor.Condition
	clock      monitor.Instant
	due        monitor.Instant
	hasDue     bool
	watched    []monitor.Watched
	chances    []monitor.Chances
	mostIDs    int
}

// take takes what the engine found since the last time, at latest by the
// message that came at the moment.
func (x *part) take(e *monitor.Engine, moment monitor.Instant) {
	f := e.Findings()
	x.refused = append(x.refused, f.Refused...)
	for i := range f.Steps {
		x.steps = append(x.steps, stepOf(&f.Steps[i], e.Position(), moment))
	}
}

func (x *part) finish(e *monitor.Engine) {
	x.account, x.conditions, x.clock, x.watched, x.mostIDs = e.Account(), e.Conditions(), e.Clock(), e.Watched(), e.MostIDs()
	x.due, x.hasDue = e.NextDue()
	x.chances = e.Chances()
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
		r.addChances(x.chances)
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
	r.Steps = p.steps(parts)
	return r
}

// addChances adds the sums of a part, in the order of the parts: sums of
// floating-point numbers depend on it.
func (r *Result) addChances(list []monitor.Chances) {
	for _, c := range list {
		i := slices.IndexFunc(r.Chances, func(x monitor.Chances) bool { return x.Indicator == c.Indicator && x.Upper == c.Upper })
		if i < 0 {
			r.Chances = append(r.Chances, c)
			continue
		}
		x := &r.Chances[i]
		x.Looks += c.Looks
		x.Sum += c.Sum
		for k := range c.AtMost {
			x.AtMost[k] += c.AtMost[k]
		}
	}
}
