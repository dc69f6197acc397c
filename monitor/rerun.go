package monitor

import (
	"cmp"
	"slices"

	"tailbell/monitor/life"
)

// change says which slots of a series new data touched.
type change struct {
	series *series
	// from and to bound the slots, both included.
	from, to int64
	// birth is where the series began before, if it is reborn: it now begins
	// earlier.
	birth  int64
	reborn bool
	// revised says that a slot changed that had been signed off.
	revised bool
	arrivalChange
}

// arrivalChange is what a change means to looks at arrivals.
type arrivalChange struct {
	// instants are those at which events came or were taken back; came is the
	// one that had none before, if comes.
	instants []Instant
	came     Instant
	comes    bool
	// weighed says that an exposure was reported or taken back, and exposed that
	// what is exposed, or where the series begins, changed in [begin, end).
	weighed, exposed bool
	begin, end       Instant
}

// rerun makes the looks that a change touches again, each with the stanza in
// force at its due time, and draws the consequences. Such looks never count
// as quiet ones.
func (e *Engine) rerun(c change) {
	s := c.series
	e.drawNow(s)
	arriving := e.lookAtArrivals(&c)
	changed := e.relook(&c)
	if len(arriving) > 0 {
		changed[upper] = append(changed[upper], arriving...)
		sortLooks(changed[upper])
	}
	for _, d := range bothTails {
		if len(changed[d]) > 0 {
			e.correct(s, d, changed[d])
		}
	}
}

// relook makes the looks at slots that a change touches again, and returns those
// that came out differently.
func (e *Engine) relook(c *change) (changed [2][]look) {
	s := c.series
	ix := s.indicator
	if c.from >= ix.looked {
		return changed // nothing was looked at yet
	}
	c.to = ix.carriedTo(c)
	last := min(ix.looked, c.to+ix.longest)
	if c.reborn {
		last = ix.looked
		if c.birth < last-ix.longest {
			last = min(last, max(c.birth, c.to)+ix.longest)
		}
	}
	for boundary := c.from + 1; boundary <= last; boundary++ {
		ep := ix.epochAt(boundary)
		for i := range ep.windows {
			p := &ep.windows[i]
			from := ix.spanFrom(s, boundary, p.Slots)
			touched := from <= c.to || (c.reborn && from < c.birth)
			if !touched || from < max(s.begin(boundary), p.whole) || !ep.cfg.SlotLooks || !ix.looksAt(p.Window, boundary) {
				continue
			}
			l := ix.look(s, ep, p.place, boundary, e.clock)
			e.account.Reruns++
			e.renote(s, &l)
			for _, d := range bothTails {
				if s.tails[d].differs(&l, d) {
					changed[d] = append(changed[d], l)
				}
			}
		}
	}
	return changed
}

// renote keeps what a look that was made again has come to.
func (e *Engine) renote(s *series, l *look) {
	ix := s.indicator
	ws := &s.windows[l.window]
	e.touch(s)
	p := ix.now().placed(l.window)
	if p == nil || l.boundary < p.since {
		return // it has no say any more
	}
	if l.status == made {
		if !ws.hasMade || l.boundary > ws.made {
			ws.made, ws.hasMade = l.boundary, true
		}
	} else if ws.hasMade && l.boundary == ws.made {
		ws.made, ws.hasMade = ix.previous(s, l.window, l.boundary)
	}
	if l.boundary == ix.latest(p.Window) && ws.withheld != l.status {
		if ws.withheld == made {
			ws.withheldSince = l.boundary
		}
		ws.withheld = l.status
	}
}

// differs reports whether the look is lit and was not, or the other way
// round, or is lit by other evidence than before.
func (t *tail) differs(l *look, d direction) bool {
	i, was := t.litOf(l)
	if !was || !l.lit[d] {
		return was != l.lit[d]
	}
	old := &t.lit[i]
	return old.events != l.events || old.exposure != l.exposure
}

// correct draws the consequences of looks that came out differently: they
// join or correct the alert whose span they lie in, withdraw one of which
// nothing is left, or open one late.
func (e *Engine) correct(s *series, d direction, looks []look) {
	t := &s.tails[d]
	t.trim(s.indicator.frozenAt, s.windows, e.alerts)
	var corrected []*alert
	var joined, stray []look
	correct := func(a *alert) {
		if a != nil && !slices.Contains(corrected, a) {
			corrected = append(corrected, a)
		}
	}
	for i := range looks {
		l := &looks[i]
		at, was := t.litOf(l)
		if was && !l.lit[d] {
			correct(t.lit[at].alert)
			t.lit = slices.Delete(t.lit, at, at+1)
			continue
		}
		var owner *alert
		if was {
			owner = t.lit[at].alert
		}
		switch first := owner == nil; {
		case !first:
			correct(owner)
		case t.ownerOf(l.boundary) == nil:
			t.set(l.asLit(d, nil))
			stray = append(stray, *l)
			continue
		default:
			if owner = t.ownerOf(l.boundary); owner == t.current {
				joined = append(joined, *l)
				continue
			}
			correct(owner)
		}
		t.join(l, owner, d)
	}
	if len(joined) > 0 {
		e.worsen(s, d, joined, e.clock)
	}
	for _, a := range corrected {
		e.amend(a)
	}
	if t.current == nil && !t.disarmed {
		if entered := e.withEntry(s, d, stray); len(entered) > 0 {
			e.openLate(s, d, stray, entered)
		}
	}
	if (t.current != nil || t.disarmed) && s.active(d) {
		t.quiet = 0
	}
}

// ownerOf returns the alert in whose own span the boundary lies: the current
// one, else a past one, else nil.
func (t *tail) ownerOf(boundary int64) *alert {
	if t.current != nil {
		return t.current
	}
	for _, a := range t.past {
		if a.record.Condition != life.Withdrawn && a.first <= boundary && boundary <= a.last {
			return a
		}
	}
	return nil
}

// amend withdraws an alert of which no look is left that signals, and else
// leaves the correction of its evidence to when the clock moves.
func (e *Engine) amend(a *alert) {
	t := a.series.tail(a.tail)
	if !a.frozen && t.of(a) == 0 {
		if t.current == a {
			t.leave(a.series.indicator.looked)
		}
		if a.record.Number == int(t.opened) {
			t.disarmed = false // the one that was closed by hand never was
		}
		e.step(a, life.Step{Kind: life.StepWithdrawn, At: e.clock.Time(), Why: e.reason()})
		return
	}
	if !a.pending {
		a.pending = true
		e.pending = append(e.pending, a)
		e.touch(a.series)
	}
}

// settleAll takes the steps of all evidence that was corrected at the moment
// that now ends, in order of series and direction.
func (e *Engine) settleAll() {
	if len(e.pending) == 0 {
		return
	}
	slices.SortFunc(e.pending, func(a, b *alert) int {
		return cmp.Or(cmp.Compare(a.series.number, b.series.number), cmp.Compare(a.tail, b.tail), cmp.Compare(a.record.Number, b.record.Number))
	})
	for _, a := range e.pending {
		if a.pending {
			e.settle(a)
		}
	}
	e.pending = e.pending[:0]
}

// settleAllOf is settleAll for the gathered sums of an indicator.
func (e *Engine) settleAllOf(up *indicator) {
	all := e.pending
	var rest []*alert
	e.pending = nil
	for _, a := range all {
		if a.series.indicator == up {
			e.pending = append(e.pending, a)
		} else {
			rest = append(rest, a)
		}
	}
	e.settleAll()
	e.pending = rest
}

// settle takes the step that corrects an alert's evidence, if any of what the
// record shows has changed.
func (e *Engine) settle(a *alert) {
	a.pending = false
	e.touch(a.series)
	e.touchAlert(a) // what was late may differ, without a step
	opening, worst := a.record.Opening, a.record.Worst
	e.revalue(a)
	if sameEvidence(&opening, &a.record.Opening) && sameEvidence(&worst, &a.record.Worst) {
		return
	}
	evidence := a.record.Worst
	e.step(a, life.Step{Kind: life.StepCorrected, At: e.clock.Time(), Evidence: &evidence})
}

// sameEvidence reports whether two looks saw the same.
func sameEvidence(a, b *life.Evidence) bool {
	return a.Window == b.Window && a.Due.Equal(b.Due) && a.Events == b.Events && a.Exposure == b.Exposure
}

// openLate opens an alert on the earliest of the looks that an event entered;
// the later ones that signal join it. It is late unless the slot of the event has
// not settled: then the look, at an arrival, was made when the event came.
func (e *Engine) openLate(s *series, d direction, stray, entered []look) {
	first := entered[0]
	opening := strongest(slices.DeleteFunc(slices.Clone(entered), func(l look) bool {
		return l.boundary != first.boundary || l.occasion != first.occasion
	}), d)
	joined := slices.DeleteFunc(slices.Clone(stray), func(l look) bool {
		return l.boundary < first.boundary || l.boundary == first.boundary && l.occasion.compare(first.occasion) < 0
	})
	e.open(s, d, joined, opening, e.clock, opening.boundary <= s.indicator.looked)
}
