package monitor

import (
	"slices"
	"time"

	"tailbell/monitor/life"
)

// twinTail is one direction of a series: its alerts, newest last.
type twinTail struct {
	alerts   []*twinAlert
	current  *twinAlert
	left     []*twinAlert // in the order in which they left
	owner    map[lookKey]*twinAlert
	spent    map[lookKey]bool
	disarmed bool
	quiet    int
}

type twinAlert struct {
	series         *twinSeries
	d              direction
	number         int
	opened         time.Time
	late           bool
	first, last    int64 // its span; last counts once it has left
	windows        map[int]bool
	acknowledged   bool
	pending        bool // its evidence was corrected at the present moment
	condition      life.Condition
	opening, worst twinEvidence
	ids            []string
}

// twinEvidence is one look as it was seen.
type twinEvidence struct {
	key lookKey
	twinLook
}

type twinStep struct {
	alert          *twinAlert
	kind           life.StepKind
	at             time.Time
	by, why        string
	condition      life.Condition
	evidence       *twinEvidence
	opening, worst twinEvidence
}

// look makes the looks of an indicator that fall due next.
func (w *twin) look(ix *twinIndicator) {
	due := ix.due(ix.looked + 1)
	ix.pass(ix.looked + 1)
	cfg := ix.at(ix.looked)
	w.allot(ix)
	for _, s := range ix.series {
		if s.birth >= ix.looked {
			continue
		}
		w.rebuild(s)
		var here []lookKey
		for i, window := range cfg.Windows {
			if !ix.slots.looksAt(ix.looked, window.Step) {
				continue
			}
			key := lookKey{ix.looked, i}
			switch s.looks[key].status {
			case made:
				w.account.Looks++
				here = append(here, key)
			case filling:
				w.account.Filling++
			case missing, overfull, unexposed, unbased, idle, closed:
				w.account.WithheldLooks++
			}
		}
		for _, d := range bothTails {
			if len(here) > 0 {
				w.decide(s, d, here, due.Time())
			}
			s.spend(d)
		}
	}
}

// decide follows the alert of one direction over the made looks of one
// boundary.
func (w *twin) decide(s *twinSeries, d direction, here []lookKey, due time.Time) {
	t := &s.tails[d]
	lit := slices.DeleteFunc(slices.Clone(here), func(k lookKey) bool { return !s.looks[k].lit[d] })
	switch {
	case t.current != nil && len(lit) > 0:
		w.worsen(s, d, lit, due)
	case t.current == nil && !t.disarmed:
		if may := w.mayOpen(s, d, lit); len(may) > 0 {
			w.open(s, d, s.smallest(d, may), lit, due, false)
		}
	}
	if t.current == nil && !t.disarmed {
		return
	}
	if s.signals(d) {
		t.quiet = 0
		return
	}
	if t.quiet++; t.quiet < s.ix.at(s.ix.looked).Quiet {
		return
	}
	t.disarmed, t.quiet = false, 0
	if a := t.current; a != nil {
		a.leave()
		w.step(a, twinStep{kind: life.StepReturned, at: due})
	}
}

// mayOpen are the looks that an event entered; every look of the lower tail.
func (w *twin) mayOpen(s *twinSeries, d direction, lit []lookKey) []lookKey {
	return slices.DeleteFunc(slices.Clone(lit), func(k lookKey) bool { return d == upper && !w.entered(s, k) })
}

func (s *twinSeries) smallest(d direction, keys []lookKey) lookKey {
	return slices.MinFunc(keys, func(a, b lookKey) int {
		switch p, q := s.looks[a].p[d].log10, s.looks[b].p[d].log10; {
		case p < q:
			return -1
		case p > q:
			return 1
		}
		return compareKeys(a, b)
	})
}

func (w *twin) open(s *twinSeries, d direction, opening lookKey, lit []lookKey, at time.Time, late bool) {
	t := &s.tails[d]
	a := &twinAlert{
		series: s, d: d, number: len(t.alerts) + 1, opened: s.ix.due(opening.boundary).Time(), late: late,
		first: opening.boundary, windows: map[int]bool{},
		opening: twinEvidence{opening, s.looks[opening]},
	}
	length := int64(s.ix.at(opening.boundary).Windows[opening.window].Slots)
	for slot := opening.boundary - length; slot < opening.boundary; slot++ {
		if x := s.sums[slot]; x != nil {
			a.ids = append(a.ids, x.ids...)
		}
	}
	t.alerts = append(t.alerts, a)
	t.current, t.quiet = a, 0
	for _, k := range lit {
		t.give(a, k)
	}
	worst := s.smallest(d, a.signalling())
	a.worst = twinEvidence{worst, s.looks[worst]}
	w.step(a, twinStep{kind: life.StepOpened, at: at, evidence: &a.opening})
}

// give notes that a look that signals belongs to the alert.
func (t *twinTail) give(a *twinAlert, k lookKey) {
	t.owner[k] = a
	a.windows[k.window] = true
	a.first = min(a.first, k.boundary)
}

// signalling are the alert's looks that signal, or did when they left the
// horizon.
func (a *twinAlert) signalling() []lookKey {
	var keys []lookKey
	for k, owner := range a.series.tails[a.d].owner {
		if owner == a {
			keys = append(keys, k)
		}
	}
	slices.SortFunc(keys, compareKeys)
	return keys
}

func (w *twin) worsen(s *twinSeries, d direction, lit []lookKey, due time.Time) {
	t := &s.tails[d]
	a, further := t.current, false
	for _, k := range lit {
		further = further || !a.windows[k.window]
		t.give(a, k)
	}
	k := s.smallest(d, lit)
	ev := twinEvidence{k, s.looks[k]}
	worst := a.worst.p[d].log10
	if !further && ev.p[d].log10 > worst-1 {
		return
	}
	if ev.p[d].log10 < worst {
		a.worst = ev
	}
	w.step(a, twinStep{kind: life.StepWorsened, at: due, evidence: &ev})
}

// leave ends the alert's run.
func (a *twinAlert) leave() {
	t := &a.series.tails[a.d]
	a.last = a.series.ix.looked
	t.left = append(t.left, a)
	t.current, t.quiet = nil, 0
}

// correct draws the consequences of looks that come out differently.
func (w *twin) correct(s *twinSeries, d direction, changed []lookKey) {
	t := &s.tails[d]
	s.spend(d)
	var corrected []*twinAlert
	var joined, stray []lookKey
	for _, k := range changed {
		owner := t.owner[k]
		switch {
		case !s.looks[k].lit[d]:
			delete(t.owner, k)
		case owner != nil:
			t.give(owner, k)
		case t.current != nil:
			joined = append(joined, k)
		default:
			if owner = t.spanOf(k.boundary); owner == nil {
				stray = append(stray, k)
			} else {
				t.give(owner, k)
			}
		}
		if owner != nil && !slices.Contains(corrected, owner) {
			corrected = append(corrected, owner)
		}
	}
	if len(joined) > 0 {
		w.worsen(s, d, joined, w.clock.Time())
	}
	for _, a := range corrected {
		w.amend(a)
	}
	if t.current == nil && !t.disarmed {
		if may := w.mayOpen(s, d, stray); len(may) > 0 {
			first := may[0].boundary
			may = slices.DeleteFunc(may, func(k lookKey) bool { return k.boundary != first })
			stray = slices.DeleteFunc(stray, func(k lookKey) bool { return k.boundary < first })
			w.open(s, d, s.smallest(d, may), stray, w.clock.Time(), true)
		}
	}
	if s.signals(d) {
		t.quiet = 0
	}
}

// spanOf is the past alert in whose span the boundary lies.
func (t *twinTail) spanOf(boundary int64) *twinAlert {
	for _, a := range t.left {
		if a.condition != life.Withdrawn && a.first <= boundary && boundary <= a.last {
			return a
		}
	}
	return nil
}

// amend withdraws an alert of which no look signals any more, and else notes
// that its evidence is to be corrected.
func (w *twin) amend(a *twinAlert) {
	if len(a.signalling()) > 0 {
		a.pending = true
		return
	}
	if a.series.tails[a.d].current == a {
		a.leave()
	}
	if t := &a.series.tails[a.d]; a.number == len(t.alerts) {
		t.disarmed = false
	}
	a.pending = false
	w.step(a, twinStep{kind: life.StepWithdrawn, at: w.clock.Time(), why: "data corrected"})
}

// settleAll takes the steps of all corrections of the moment that ends.
func (w *twin) settleAll() {
	for _, s := range w.order {
		for _, d := range bothTails {
			for _, a := range s.tails[d].alerts {
				w.settle(a)
			}
		}
	}
}

// settle finds an alert's evidence anew, and takes a step if it is another.
// What lies beyond the horizon stays as it was seen.
func (w *twin) settle(a *twinAlert) {
	if !a.pending {
		return
	}
	a.pending = false
	s, opening, worst := a.series, a.opening, a.worst
	now := slices.DeleteFunc(a.signalling(), func(k lookKey) bool { return s.ix.frozen(k.boundary) })
	openingStays, worstStays := s.ix.frozen(opening.key.boundary), s.ix.frozen(worst.key.boundary)
	if slices.Contains(now, opening.key) {
		a.opening = twinEvidence{opening.key, s.looks[opening.key]}
	} else if !openingStays && len(now) > 0 {
		a.opening = twinEvidence{now[0], s.looks[now[0]]}
	}
	if len(now) > 0 {
		k := s.smallest(a.d, now)
		if !worstStays || s.looks[k].p[a.d].log10 < worst.p[a.d].log10 {
			a.worst = twinEvidence{k, s.looks[k]}
		}
	} else if !worstStays && openingStays {
		a.worst = a.opening
	}
	if !a.opening.same(opening) || !a.worst.same(worst) {
		w.step(a, twinStep{kind: life.StepCorrected, at: w.clock.Time(), evidence: &a.worst})
	}
}

func (ev twinEvidence) same(other twinEvidence) bool {
	return ev.key == other.key && ev.events == other.events && ev.exposure == other.exposure
}

func (w *twin) step(a *twinAlert, x twinStep) {
	w.settle(a)
	switch x.kind {
	case life.StepOpened:
		a.condition = life.Unacknowledged
	case life.StepReturned:
		a.condition = life.Returned
	case life.StepWithdrawn:
		a.condition = life.Withdrawn
	case life.StepClosed:
		a.condition = life.Closed
	case life.StepAcknowledged:
		a.acknowledged = true
		if a.condition == life.Unacknowledged {
			a.condition = life.Acknowledged
		}
	case life.StepWorsened, life.StepCorrected, life.StepNote, life.StepMarked, life.StepShelved, life.StepUnshelved,
		life.StepReminder, life.StepTest: // the streams shelve nothing
	}
	x.alert, x.condition, x.opening, x.worst = a, a.condition, a.opening, a.worst
	if x.evidence != nil {
		ev := *x.evidence
		x.evidence = &ev
	}
	w.steps = append(w.steps, x)
	if a.condition == life.Returned && a.acknowledged && (x.kind == life.StepReturned || x.kind == life.StepAcknowledged) {
		w.step(a, twinStep{kind: life.StepClosed, at: x.at, why: life.ReturnedAndAcknowledged})
	}
}

// done reports whether nothing can happen to the alert any more.
func (a *twinAlert) done() bool {
	return a.condition == life.Closed || a.condition == life.Withdrawn
}

func (w *twin) act(m *Message) {
	act := m.Act
	if w.history && !m.HasTime && act.HasAt {
		w.advance(act.At)
	}
	a := w.alertOf(act)
	reason := NoSuchAlert
	if a != nil {
		reason = w.perform(a, act)
	}
	if reason != "" {
		w.account.ActsRefused++
		w.refuse(0, reason)
		return
	}
	w.account.Acts++
}

func (w *twin) alertOf(act Act) *twinAlert {
	for _, s := range w.order {
		for _, d := range bothTails {
			for i := len(s.tails[d].alerts) - 1; i >= 0; i-- {
				a := s.tails[d].alerts[i]
				switch {
				case act.Alert != "" && act.Alert == alertID(s.name, d, a.opened, a.number):
					if a.done() && s.ix.frozen(a.last) {
						return nil
					}
					return a
				case act.Alert == "" && act.Series == s.name && act.Direction == d.name() && !a.done():
					return a
				}
			}
		}
	}
	return nil
}

// opened is the step that opened the alert.
func (w *twin) opened(a *twinAlert) twinStep {
	return w.steps[slices.IndexFunc(w.steps, func(x twinStep) bool { return x.alert == a })]
}

func (w *twin) perform(a *twinAlert, act Act) Reason {
	x := twinStep{at: w.clock.Time(), by: act.By, why: act.Why}
	if act.HasAt && act.At < InstantOf(w.opened(a).at) {
		return NotAllowed // it can't have been meant for this one
	}
	switch act.Kind { //nolint:exhaustive // the twin plays no acts on series
	case Acknowledge:
		if a.done() || a.acknowledged {
			return NotAllowed
		}
		x.kind = life.StepAcknowledged
	case Close:
		if a.done() {
			return NotAllowed
		}
		x.kind = life.StepClosed
	case Note:
		x.kind = life.StepNote
	case Mark, Shelve, Unshelve:
		return NotAllowed // the streams hold none
	}
	for _, old := range w.steps {
		if act.HasAt && old.alert == a && old.kind == x.kind && InstantOf(old.at) == act.At && old.by == x.by && old.why == x.why {
			return NotAllowed // it was sent again
		}
	}
	ringing := a.series.tails[a.d].current == a
	w.step(a, x)
	if ringing && act.Kind == Close {
		a.leave()
		a.series.tails[a.d].disarmed = true
	}
	return ""
}
