// Package audit holds what an engine made of a scenario against the
// publishers' own ledger.
//
// The two were computed apart: the ledger from what was meant, the engine's
// account from what arrived. They must agree to the last element, event and
// grain of exposure.
package audit

import (
	"cmp"
	"fmt"
	"slices"
	"time"

	"tailbell/monitor"
	"tailbell/monitor/life"
	"tailbell/monitor/rehearse"
)

// Result is what came of an audit.
type Result struct {
	// Classes are the classes with both counts.
	Classes []ClassCount
	// Slots is how many slots were compared; Events is what they hold.
	Slots  int
	Events int64
	// Differences says in words where the two disagree, the first ones of
	// them; Differing counts all.
	Differences []string
	Differing   int
	Findings    []Finding
}

// ClassCount is one class of elements in the ledger and in the account.
type ClassCount struct {
	Class           rehearse.Class
	Ledger, Account int64
}

// Finding is a planted excess, and the first alert that found it.
type Finding struct {
	Planted rehearse.Excess
	Found   bool
	Alert   string
	// Delay from the excess's beginning to the look that found it.
	Delay time.Duration
}

// most is how many differences are told in words.
const most = 20

// Compare holds the account, the slots and the alerts against the scenario's
// ledger and what was planted. A slot may stand several times in slots; the
// last one counts.
func Compare(s *rehearse.Scenario, a monitor.Account, slots []monitor.SlotSum, alerts []life.Record) *Result {
	r := &Result{}
	r.classes(&s.Ledger, a)
	r.slots(&s.Ledger, slots)
	for _, x := range s.Planted {
		r.Findings = append(r.Findings, find(x, alerts))
	}
	return r
}

func (r *Result) differ(format string, args ...any) {
	if r.Differing++; r.Differing <= most {
		r.Differences = append(r.Differences, fmt.Sprintf(format, args...))
	}
}

func (r *Result) classes(l *rehearse.Ledger, a monitor.Account) {
	want := l.Count()
	have := map[rehearse.Class]int64{
		rehearse.Counted: a.Counted, rehearse.Repeat: a.Repeat, rehearse.Replaced: a.Replaced, rehearse.Outdated: a.Outdated,
		rehearse.Refused: a.Refused, rehearse.Unmonitored: a.Unmonitored, rehearse.Withheld: a.Withheld,
	}
	for _, class := range rehearse.Classes {
		c := ClassCount{class, int64(want[class]), have[class]}
		r.Classes = append(r.Classes, c)
		if c.Ledger != c.Account {
			r.differ("%s: the ledger says %d, the account %d", class, c.Ledger, c.Account)
		}
	}
	for reason, n := range l.Reasons() {
		if got := a.RefusedBy[monitor.Reason(reason)]; got != int64(n) {
			r.differ("refused %s: the ledger says %d, the account %d", reason, n, got)
		}
	}
	if !a.Balanced() {
		r.differ("the account does not balance: %d elements", a.Elements)
	}
}

type slotKey struct {
	series string
	start  monitor.Instant
}

func (r *Result) slots(l *rehearse.Ledger, slots []monitor.SlotSum) {
	have := make(map[slotKey]*monitor.SlotSum, len(slots))
	for i := range slots {
		s := &slots[i]
		if key := (slotKey{s.Series, s.Start}); s.HasEvents || s.HasExposure {
			have[key] = s
		} else {
			delete(have, key)
		}
	}
	for i := range l.Slots {
		want := &l.Slots[i]
		key := slotKey{want.Series, monitor.InstantOf(want.Start)}
		got := have[key]
		switch {
		case got == nil:
			r.differ("%s %s: the ledger has it, the engine does not", want.Series, want.Start)
		case got.Events != want.Events || got.Exposure != want.Exposure.String() || got.HasExposure != want.HasExposure:
			r.differ("%s %s: the ledger says %d in %s, the engine %d in %s", want.Series, want.Start,
				want.Events, want.Exposure, got.Events, got.Exposure)
		}
		r.Slots++
		r.Events += want.Events
		delete(have, key)
	}
	for key := range have {
		r.differ("%s %s: the engine has it, the ledger does not", key.series, key.start.Time())
	}
}

// find returns the first alert of the planted series and direction whose
// opening window reaches into the planted span, and that was not withdrawn.
func find(x rehearse.Excess, alerts []life.Record) Finding {
	f := Finding{Planted: x}
	sorted := slices.SortedFunc(slices.Values(alerts), func(a, b life.Record) int {
		return cmp.Compare(a.Steps[0].At.UnixMicro(), b.Steps[0].At.UnixMicro())
	})
	for i := range sorted {
		a := &sorted[i]
		if a.Series == x.Series && string(a.Direction) == string(x.Direction) && a.Condition != life.Withdrawn &&
			a.Opening.To.After(x.From) && a.Opening.From.Before(x.To) && a.Steps[0].At.After(x.From) {
			return Finding{Planted: x, Found: true, Alert: a.ID, Delay: a.Steps[0].At.Sub(x.From)}
		}
	}
	return f
}
