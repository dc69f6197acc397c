package monitor

import (
	"cmp"
	"encoding/json"
	"fmt"
	"slices"
	"time"

	"tailbell/config"
	"tailbell/monitor/life"
)

// maxFacts bounds the acts on series that hold at once.
const maxFacts = 5000

// performOnSeries takes an act on series, or says why it can't be.
func (e *Engine) performOnSeries(act *Act) (Reason, string) {
	f := fact{
		Kind: act.Kind, Series: act.Series, What: act.What, Into: act.Into, Side: act.Side, Straddle: act.Straddle,
		From: act.From, Until: act.Until, Taken: e.clock, By: act.By, Why: act.Why,
	}
	if act.Kind == BackInService {
		return e.backInService(&f)
	}
	if reason, detail := e.senseless(&f); reason != "" {
		return reason, detail
	}
	if s := e.byName[f.Series]; f.What == Opening && !config.IsSum(f.Series) && (s == nil || s.birth == unborn) {
		if reason, detail := e.openNew(&f); reason != "" {
			return reason, detail
		}
	}
	e.forgetFacts()
	if len(e.facts) >= maxFacts {
		return NotAllowed, fmt.Sprintf("%d acts on series hold already: let one with a pattern take the place of many", maxFacts)
	}
	e.keepFacts(append(e.facts, f))
	e.enforce(&f, f.From, f.Until)
	return "", ""
}

// matched returns the series that the act is on.
func (e *Engine) matched(f *fact) []*series {
	var list []*series
	if !config.IsSum(f.Series) {
		if s := e.byName[f.Series]; s != nil {
			list = append(list, s)
		}
		return list
	}
	p := config.NewPattern(f.Series)
	for _, s := range e.series {
		if !s.retired && p.Match(s.name) {
			list = append(list, s)
		}
	}
	return list
}

// mayMatch reports whether a series yet to come may match.
func (e *Engine) mayMatch(f *fact) bool {
	return slices.ContainsFunc(e.indicators, func(ix *indicator) bool { return ix.cfg.MayMatch(config.NewPattern(f.Series)) })
}

// openNew makes a series that opens before anything was heard of it.
func (e *Engine) openNew(f *fact) (Reason, string) {
	ix, other := e.indicatorOf(f.Series)
	switch {
	case ix == nil || other != nil:
		return NoSuchSeries, fmt.Sprintf("series %q belongs to no indicator, or to two: it can't be opened", f.Series)
	case e.living+len(e.newSums(ix, f.Series)) >= e.setup.Limits.MaxSeries:
		return SeriesFull, fmt.Sprintf("%d series are monitored already: raise limits.max_series", e.setup.Limits.MaxSeries)
	}
	s := e.byName[f.Series] // it may be expected
	if s == nil {
		s = e.enter(ix, f.Series)
		e.link(s)
		e.inheritAgain(s)
	}
	s.birth = ix.firstFrom(f.From)
	e.inform(s, s.birth, ix.looked-1, true, "")
	for _, c := range e.changeSums(nil, s, s.birth, ix.looked-1) {
		e.rerun(c)
	}
	return "", ""
}

// backInService lets a span out of service end earlier.
func (e *Engine) backInService(f *fact) (Reason, string) {
	facts := slices.Clone(e.facts)
	for i := range facts {
		x := &facts[i]
		if x.Kind != OutOfService || x.Series != f.Series || f.From < x.From || f.From >= x.Until {
			continue
		}
		for _, s := range e.matched(x) {
			if ix := s.indicator; ix.started && ix.firstFrom(f.From) <= ix.frozenAt {
				return BeyondHorizon, fmt.Sprintf("%s lies before the horizon: looks from before can't change any more", dateIn(ix.cfg.Zone, f.From))
			}
		}
		until := x.Until
		x.Until = f.From
		e.keepFacts(facts)
		e.enforce(x, x.Until, until)
		return "", ""
	}
	return NotAllowed, e.notOutBy(f)
}

// keepFacts puts the facts in force.
func (e *Engine) keepFacts(facts []fact) {
	e.facts = facts
	e.factsJSON = nil
}

// forgetFacts drops what no look needs any more. Spans out of service are needed
// as long as series may retire or be silent but for them.
func (e *Engine) forgetFacts() {
	oldest, out := Never, Never
	for _, ix := range e.indicators {
		back := ix.cfg.Retire
		for i := range ix.cfg.Expect {
			back = max(back, ix.cfg.Expect[i].Within)
		}
		if back > 0 {
			out = min(out, ix.cal.Start(ix.cal.Slot(e.clock.Add(-back))))
		}
		for _, k := range ix.kin() {
			if !k.started {
				return
			}
			oldest = min(oldest, k.cal.Start(k.kept))
		}
	}
	var gone []fact
	e.keepFacts(slices.DeleteFunc(slices.Clone(e.facts), func(f fact) bool {
		needed := oldest
		if f.Kind == OutOfService {
			needed = min(oldest, out)
		}
		if f.turns() || max(f.From, f.Until) >= needed {
			return false
		}
		gone = append(gone, f)
		return true
	}))
	for i := range gone { // as after a restart
		for _, s := range e.matched(&gone[i]) {
			s.dates = e.datesOf(s.indicator, s.name)
			e.awaits(s)
		}
	}
}

// enforce brings the facts into force for the series that the fact matches, and
// makes the looks again that they change: those over [from, until).
func (e *Engine) enforce(f *fact, from, until Instant) {
	var now []*series
	for _, s := range e.matched(f) {
		if s.indicator.of == nil || f.Kind == Reset && !e.behind(s.indicator, e.clock) {
			now = append(now, s)
		}
	}
	for _, up := range e.laterFor(f) {
		kept := *f
		e.deferrals = append(e.deferrals, deferral{Position: e.position, At: e.clock, Indicator: up.cfg.Name, Fact: &kept, From: from, Until: until})
	}
	e.enforceOn(now, f, from, until, true)
}

// enforceOn is enforce for some series. succeed says that the series which takes
// their place, if any does, is among them.
func (e *Engine) enforceOn(some []*series, f *fact, from, until Instant, succeed bool) {
	var changes, ofSums []change
	for _, s := range some {
		ix := s.indicator
		s.dates = e.datesOf(ix, s.name)
		e.awaitAgain(s, NotOpen)
		s.forgetSums()
		e.touch(s)
		c := change{series: s, from: ix.firstFrom(from)}
		c.weighed = true
		e.inform(s, noNewsFrom, noNewsTo, true, f.why(ix.cal.zone))
		switch {
		case f.Kind == Reset:
			e.rearm(s, f)
			continue
		case f.Kind == SignOff || f.Straddle:
			continue
		case f.Kind == OutOfService:
			span := ix.touched(from, until)
			c.from, c.to = span.from, span.to-1
		case f.turns():
			c.to = ix.looked - 1
		default:
			c.to = c.from
		}
		changes = append(changes, c)
		if f.Kind == OutOfService || f.turns() {
			ofSums = e.changeHeirs(e.changeSums(ofSums, s, c.from, c.to), s, c.from, c.to)
			e.inform(s, c.from, c.to, true, f.why(ix.cal.zone))
		}
	}
	if f.Into != "" && succeed {
		ofSums = e.succeedTo(ofSums, f)
	}
	slices.SortFunc(ofSums, func(a, b change) int { return cmp.Compare(a.series.number, b.series.number) })
	for _, c := range append(changes, ofSums...) {
		e.because = f.why(c.series.indicator.cfg.Zone)
		e.rerun(c)
	}
	e.because = ""
}

// rearm ends the run of what signals: the looks to come are about other counts,
// and what they find is an alert of its own.
func (e *Engine) rearm(s *series, f *fact) {
	for w := range s.windows {
		s.windows[w].hasMade = false
	}
	for d := range s.tails {
		t := &s.tails[d]
		if a := t.current; a != nil {
			t.leave(s.indicator.looked)
			e.step(a, life.Step{Kind: life.StepReturned, At: e.clock.Time(), By: f.By, Why: f.why(s.indicator.cfg.Zone)})
		}
		t.disarmed, t.quiet = false, 0
	}
}

// shutDown ends the run of what signals in a series that is closed.
func (e *Engine) shutDown(s *series, boundary int64, due Instant) {
	for d := range s.tails {
		if t := &s.tails[d]; t.current != nil {
			a := t.current
			t.leave(boundary)
			e.step(a, life.Step{Kind: life.StepReturned, At: due.Time(), Why: "the series is closed"})
		}
	}
}

// changeSums sums the slots of the series' sums again.
func (e *Engine) changeSums(list []change, s *series, from, to int64) []change {
	for _, sum := range s.sums {
		list = e.changeSum(list, sum, from, to)
	}
	return list
}

// why is what a step that follows from the fact gives as its reason.
func (f *fact) why(zone *time.Location) string {
	return f.what() + " from " + dateIn(zone, f.From)
}

func (f *fact) what() string {
	switch {
	case f.Kind != Change:
		return f.Kind.String()
	case f.Into != "":
		return string(f.What) + " into " + f.Into
	case f.turns():
		return string(f.What)
	}
	return "change of " + string(f.What)
}

// reason is why looks come out differently at this moment.
func (e *Engine) reason() string {
	if e.because != "" {
		return e.because
	}
	return "data corrected"
}

// forgetSums forgets the running sums of all windows.
func (s *series) forgetSums() {
	s.runnings = nil
}

func (e *Engine) encodeFacts() json.RawMessage {
	if e.factsJSON == nil && len(e.facts) > 0 {
		data, err := json.Marshal(e.facts)
		if err != nil {
			panic(err) // a struct of plain fields
		}
		e.factsJSON = data
	}
	return e.factsJSON
}

func (e *Engine) restoreFacts(data json.RawMessage) error {
	if len(data) == 0 {
		return nil
	}
	if err := json.Unmarshal(data, &e.facts); err != nil {
		return fmt.Errorf("monitor: reading the stored acts on series: %w", err)
	}
	return nil
}

// factsOf tells of the acts that hold for a series.
func (e *Engine) factsOf(ix *indicator, series string) []Dated {
	var all []Dated
	for i := range e.facts {
		f := &e.facts[i]
		if f.Into != series && !f.matches(series) || f.Kind == SignOff {
			continue
		}
		what := f.what()
		if f.Into == series {
			what = "in the place of " + f.Series
		}
		if f.Kind == OutOfService {
			what += " until " + f.Until.in(ix.cfg.Zone).Format("2006-01-02 15:04")
		}
		if f.Why != "" {
			what += ": " + f.Why
		}
		all = append(all, Dated{f.From.in(ix.cfg.Zone), what + " (" + f.By + ")"})
	}
	slices.SortStableFunc(all, func(a, b Dated) int { return a.At.Compare(b.At) })
	return all
}
