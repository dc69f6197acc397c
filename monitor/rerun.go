package monitor

import (
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
}

// rerun makes the looks that a change touches again, each with the stanza in
// force at its due time, and draws the consequences. Such looks never count
// as quiet ones.
func (e *Engine) rerun(c change) {
	s := c.series
	ix := s.indicator
	if c.from >= ix.looked {
		return // nothing was looked at yet
	}
	var changed [2][]look
	last := min(ix.looked, c.to+ix.longest)
	if c.reborn {
		last = ix.looked
		if c.birth < last-ix.longest {
			last = min(last, max(c.birth, c.to)+ix.longest)
		}
	}
	for boundary := c.from + 1; boundary <= last; boundary++ {
		ep := ix.epochAt(boundary)
		for w := range ep.cfg.Windows {
			window := &ep.cfg.Windows[w]
			from := boundary - int64(window.Slots)
			touched := from <= c.to || (c.reborn && from < c.birth)
			if !touched || from < s.birth || !ix.looksAt(window, boundary) {
				continue
			}
			l := ix.look(s, ep, w, boundary)
			e.account.Reruns++
			e.renote(s, &l)
			for _, d := range bothTails {
				if s.tails[d].differs(&l, d) {
					changed[d] = append(changed[d], l)
				}
			}
		}
	}
	for _, d := range bothTails {
		if len(changed[d]) > 0 {
			e.correct(s, d, changed[d])
		}
	}
}

// renote keeps what a look that was made again has come to.
func (e *Engine) renote(s *series, l *look) {
	ix := s.indicator
	ws := &s.windows[l.window]
	e.touch(s)
	if l.status == made {
		if !ws.hasMade || l.boundary > ws.made {
			ws.made, ws.hasMade = l.boundary, true
		}
	} else if ws.hasMade && l.boundary == ws.made {
		ws.made, ws.hasMade = ix.previous(s, l.window, l.boundary)
	}
	if l.boundary == ix.latest(&ix.cfg.Windows[l.window]) && ws.withheld != l.status {
		if ws.withheld == made {
			ws.withheldSince = l.boundary
		}
		ws.withheld = l.status
	}
}

// differs reports whether the look is lit and was not, or the other way
// round, or is lit by other evidence than before.
func (t *tail) differs(l *look, d direction) bool {
	i, was := t.litAt(l.boundary, l.window)
	if !was || !l.lit[d] {
		return was != l.lit[d]
	}
	old := &t.lit[i]
	return old.events != l.events || old.exposure != l.exposure
}

// correct draws the consequences of looks that came out differently: they
// correct the alert whose span they lie in, withdraw one of which nothing is
// left, or open one late.
func (e *Engine) correct(s *series, d direction, looks []look) {
	t := &s.tails[d]
	t.trim(s.indicator.frozenAt, s.windows, e.alerts)
	var touched []*alert
	var stray []look
	touch := func(a *alert) {
		if a != nil && !slices.Contains(touched, a) {
			touched = append(touched, a)
		}
	}
	for i := range looks {
		l := &looks[i]
		at, was := t.litAt(l.boundary, l.window)
		if was && !l.lit[d] {
			touch(t.lit[at].alert)
			t.lit = slices.Delete(t.lit, at, at+1)
			continue
		}
		owner := t.ownerOf(l.boundary)
		if was && t.lit[at].alert != nil {
			owner = t.lit[at].alert
		}
		if owner == nil {
			t.set(litLook{boundary: l.boundary, window: l.window, events: l.events, exposure: l.exposure, log10p: l.log10p[d]})
			stray = append(stray, *l)
			continue
		}
		t.join(l, owner, d)
		touch(owner)
	}
	for _, a := range touched {
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

// amend corrects the evidence of an alert, or withdraws it if no look is left
// that signals.
func (e *Engine) amend(a *alert) {
	t := &a.series.tails[a.tail]
	if !a.frozen && t.of(a) == 0 {
		if t.current == a {
			t.leave(a.series.indicator.looked)
		}
		e.step(a, life.Step{Kind: life.StepWithdrawn, At: e.clock.Time(), Why: "data corrected"})
		return
	}
	e.revalue(a)
	worst := a.record.Worst
	e.step(a, life.Step{Kind: life.StepCorrected, At: e.clock.Time(), Evidence: &worst})
}

// openLate opens an alert on the earliest of the looks that an event entered;
// the later ones that signal join it.
func (e *Engine) openLate(s *series, d direction, stray, entered []look) {
	first := entered[0].boundary
	opening := strongest(slices.DeleteFunc(slices.Clone(entered), func(l look) bool {
		return l.boundary != first
	}), d)
	joined := slices.DeleteFunc(slices.Clone(stray), func(l look) bool { return l.boundary < first })
	e.open(s, d, joined, opening, e.clock, true)
}
