package monitor

import (
	"cmp"
	"fmt"
	"slices"
	"strings"

	"tailbell/config"
	"tailbell/monitor/life"
)

// deferral is something that a person did to gathered sums, which is done when
// they have come to its moment: what comes before it in time must.
type deferral struct {
	Position  uint64  `json:"position"`
	At        Instant `json:"at"`
	Indicator string  `json:"indicator"`
	Act       *Act    `json:"act,omitempty"`
	// Fact is an act on series that holds already, but for these sums.
	Fact  *fact   `json:"fact,omitempty"`
	From  Instant `json:"from,omitempty"`
	Until Instant `json:"until,omitempty"`
}

// behind reports whether the gathered sums have not come to a moment: a look
// before it waits for a partition.
func (e *Engine) behind(ix *indicator, moment Instant) bool {
	return ix.of != nil && e.partition.Of > 1 && (!ix.started || moment >= ix.nextDue)
}

// putOff puts an act on an alert of gathered sums off to when they have come to
// its moment, and reports whether it did.
func (e *Engine) putOff(act *Act, position uint64) bool {
	ix := e.behindOf(act)
	if ix == nil {
		return false
	}
	kept := *act
	e.deferrals = append(e.deferrals, deferral{Position: position, At: e.clock, Indicator: ix.cfg.Name, Act: &kept})
	return true
}

// behindOf returns the indicator of gathered sums that are behind and that the
// act may be on, nil for none: the alert may be yet to be found.
func (e *Engine) behindOf(act *Act) *indicator {
	if e.partition.Of <= 1 || e.alerts[act.Alert] != nil && e.alerts[act.Alert].series.indicator.of == nil {
		return nil
	}
	for _, ix := range e.indicators {
		g := ix.gathering
		if g == nil || g.sums == nil || !e.behind(g.sums, e.clock) {
			continue
		}
		a := e.alerts[act.Alert]
		switch {
		case act.Alert == "":
			if slices.ContainsFunc(ix.cfg.Gathered(e.partition.KeyParts), func(m config.Sum) bool { return m.Makes(act.Series) }) {
				return g.sums
			}
		case a == nil || a.series.indicator == g.sums:
			return g.sums
		}
	}
	return nil
}

// laterFor returns the indicators whose gathered sums the act may be on, but not
// yet. Like what their members count, what is said of them reaches them at the
// next boundary, but for a reset: it holds at once, unless they are behind.
func (e *Engine) laterFor(f *fact) (list []*indicator) {
	if !config.IsSum(f.Series) {
		return nil
	}
	for _, ix := range e.indicators {
		if g := ix.gathering; g != nil && g.sums != nil && (f.Kind != Reset || e.behind(g.sums, e.clock)) && ix.cfg.MayMatch(config.NewPattern(f.Series)) {
			list = append(list, g.sums)
		}
	}
	return list
}

// enforceLater brings acts on gathered sums into force that were put off to a
// boundary.
func (e *Engine) enforceLater(up *indicator) {
	for {
		next := slices.IndexFunc(e.deferrals, func(d deferral) bool {
			return d.Indicator == up.cfg.Name && d.Fact != nil && d.Fact.Kind != Reset && d.At < e.clock
		})
		if next < 0 {
			return
		}
		d := e.deferrals[next]
		e.deferrals = slices.Delete(e.deferrals, next, next+1)
		e.enforceOn(e.matchedSums(d.Fact, up), d.Fact, d.From, d.Until, false)
	}
}

func (e *Engine) matchedSums(f *fact, up *indicator) []*series {
	return slices.DeleteFunc(e.matched(f), func(s *series) bool { return s.indicator != up })
}

// catchUp lets happen to gathered sums what waited for them, in order.
func (e *Engine) catchUp(g *gathering) {
	up := g.sums
	for {
		waking := e.firstWake(up)
		next := slices.IndexFunc(e.deferrals, func(d deferral) bool {
			return d.Indicator == up.cfg.Name && (d.Fact == nil || d.Fact.Kind == Reset) && !e.behind(up, d.At)
		})
		switch {
		case waking != nil && (next < 0 || waking.wake <= e.deferrals[next].At):
			e.wakeUp(waking, waking.wake, e.clock)
		case next >= 0:
			d := e.deferrals[next]
			e.deferrals = slices.Delete(e.deferrals, next, next+1)
			e.performDeferred(&d, up)
		default:
			return
		}
	}
}

// firstWake returns the alert of the sums to which something happened by itself
// first, of what they have come to; nil if nothing did.
func (e *Engine) firstWake(up *indicator) *alert {
	var first *alert
	for _, a := range e.alerts {
		if a.series.indicator != up || a.wake > e.clock || e.behind(up, a.wake) {
			continue
		}
		if first == nil || cmp.Or(cmp.Compare(a.wake, first.wake), cmp.Compare(a.series.number, first.series.number),
			cmp.Compare(a.tail, first.tail), cmp.Compare(a.record.Number, first.record.Number)) < 0 {
			first = a
		}
	}
	return first
}

// performDeferred does what was put off, as of its moment.
func (e *Engine) performDeferred(d *deferral, up *indicator) {
	clock := e.clock
	e.clock = d.At
	defer func() { e.clock = clock }()
	if d.Fact != nil {
		e.enforceOn(e.matchedSums(d.Fact, up), d.Fact, d.From, d.Until, false)
		e.settleAllOf(up)
		return
	}
	if e.putOff(d.Act, d.Position) { // it may be on sums of another indicator
		return
	}
	if reason, detail := e.perform(d.Act); reason != "" {
		e.account.ActsRefused++
		e.refuse(&Message{Position: d.Position}, 0, d.Act.Series, reason, detail, d.Act.Raw)
		return
	}
	e.account.Acts++
}

// wakeUp lets happen to an alert what happens by itself at a moment, on the
// clock's way to another.
func (e *Engine) wakeUp(a *alert, moment, to Instant) {
	if a.record.Shelf != nil {
		e.step(a, life.Step{Kind: life.StepUnshelved, At: moment.Time(), Why: TimeIsOver})
		return
	}
	cfg := a.series.indicator.cfg
	number := int64(moment-waitsOf(&a.record).since) / cfg.Remind.Microseconds()
	e.steps = append(e.steps, a.record.Reminder(number, moment.Time(), cfg.RemindTo))
	e.rewake(a, to)
}

// tellers names partitions that have to tell something.
func tellers(parts []int) string {
	names := strings.Trim(strings.ReplaceAll(fmt.Sprint(parts), " ", ", "), "[]")
	if len(parts) > 1 {
		return "partitions " + names + " have to tell"
	}
	return "partition " + names + " has to tell"
}

// lackingConditions tells of which indicators partitions have not told what they
// count: those before it stay in force.
func (e *Engine) lackingConditions() []Condition {
	var list []Condition
	for _, ix := range e.indicators {
		if parts := e.lacking(ix); len(parts) > 0 {
			list = append(list, Condition{
				Series: ix.cfg.Series[0].String(), Indicator: ix.cfg.Name, Kind: WaitsForPartition, Since: ix.due(ix.dayBegins(ix.looked)),
				Text: "what was counted of all partitions before that is in force until it is known what " + tellers(parts),
			})
		}
	}
	return list
}

// waitingConditions tells which partitions gathered sums wait for.
func (e *Engine) waitingConditions() []Condition {
	var list []Condition
	for _, ix := range e.indicators {
		g := ix.gathering
		if g == nil || g.inbound == nil || !e.behind(g.sums, e.clock) {
			continue
		}
		parts := g.waitsFor()
		if len(parts) == 0 {
			continue
		}
		text := "it waits for what " + tellers(parts)
		for _, sum := range g.sums.sums {
			list = append(list, Condition{
				Series: sum.name, Indicator: ix.cfg.Name, Kind: WaitsForPartition, Since: g.sums.nextDue, Text: text,
			})
		}
	}
	return list
}
