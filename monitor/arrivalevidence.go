package monitor

import (
	"math"

	"tailbell/config"
	"tailbell/exact"
	"tailbell/monitor/arrival"
	"tailbell/monitor/life"
)

// dueOf is when the look was due: one at an arrival when the event came.
func (ix *indicator) dueOf(l *look) Instant {
	if l.occasion.arrival {
		return l.occasion.at
	}
	return ix.due(l.boundary)
}

// evidenceOf says what a look of either kind saw, with the data as they stand,
// under what was in force when it fell due.
func (e *Engine) evidenceOf(s *series, d direction, key lookKey, o occasion) life.Evidence {
	if !o.arrival {
		return e.evidence(s, d, key.boundary, key.window)
	}
	return e.arrivalEvidence(s, key.window, o.at)
}

// arrivalEvidence is evidence for a window that ends at a moment.
func (e *Engine) arrivalEvidence(s *series, window int, at Instant) life.Evidence {
	ix := s.indicator
	judging := ix.judging(at)
	ep := ix.epochAt(judging)
	w := ix.arrivalWindow(window)
	from, _ := ix.windowFrom(s, w, at)
	l := look{window: window}
	ix.measureSpan(s, &l, from, at)
	u, ok := ix.arrivalJudgedBy(s, window, judging)
	if !ok {
		panic("monitor: evidence of a look without a baseline")
	}
	o := ix.spanOpportunity(s, &u, l.exposure, from, at)
	ev := e.tell(s, upper, ep, judging, &seen{window, w.shownFrom(from), at, at, l.tally, u, o})
	ev.SignedOff = ix.isSigned(s, ix.cal.Slot(from), ix.cal.Slot(at)+1)
	ev.Wait = ix.waitOf(s, &u, ev.Critical, at)
	return ev
}

// shownFrom is where a window begins as people are told: where the span does, which
// is not in it, or the moment of its oldest trial.
func (w arrivalWindow) shownFrom(from Instant) Instant {
	if w.trials > 0 {
		return from + 1
	}
	return from
}

// waitOf says how long the latest events took: as many as signal.
func (ix *indicator) waitOf(s *series, u *usual, critical int64, at Instant) *life.Wait {
	log := &s.arrivals.log
	r := &life.Wait{}
	if previous, ok := log.Previous(int64(at)); ok && log.At(int64(at)).Events == 1 {
		t := Instant(previous).in(u.cfg.Zone)
		r.Previous = &t
	}
	since, ok := log.Kth(int64(at), critical)
	if critical < 2 || !ok || ix.counted(s, Instant(since)-1, at).Events < critical {
		return r
	}
	first := Instant(since)
	l := look{}
	var o opportunity
	if first < at {
		if ix.measureSpan(s, &l, first, at); l.status != made {
			return r
		}
		o = ix.spanOpportunity(s, u, l.exposure, first, at)
	}
	t := first.in(u.cfg.Zone)
	r.Events, r.First, r.Exposure = critical, &t, l.exposure.decimal(u.cfg.GrainDigits)
	usual := u.rate()
	r.Usual = float64(critical-1) / usual
	if u.cfg.Measure == config.Rate && u.ref == nil && u.base.Spread <= 1 && single(log, since, at) {
		p := exact.Wait{Events: critical - 1, Rate: usual * u.margin(upper)}.Within(o.weighted)
		r.P = &p
	}
	return r
}

// single reports whether one event came at each instant of a stretch: what comes
// together has no gaps between it, and no law of them.
func single(log *arrival.Log, from int64, to Instant) bool {
	for _, c := range log.Instants(from, int64(to)) {
		if c.Events > 1 {
			return false
		}
	}
	return true
}

// idsOf lists the ids of the observations whose events a look saw.
func (e *Engine) idsOf(s *series, l *look) (ids []string, more int) {
	ix := s.indicator
	if !l.occasion.arrival {
		return s.idsIn(ix.spanFrom(s, l.boundary, ix.places[l.window].Slots), l.boundary)
	}
	at := l.occasion.at
	from, _ := ix.windowFrom(s, ix.arrivalWindow(l.window), at)
	from = ix.cutFrom(s, from, at)
	site := siteOf(s.name)
	for _, c := range s.cells.between(ix.cal.Slot(from), l.boundary) {
		if s.dates.isOut(c.slot) {
			continue
		}
		for _, id := range s.eventIDs.of(c.slot) {
			known := e.ids.get(idKey{site, id}, e.series)
			switch {
			case known != nil && (known.said.start <= from || known.said.start > at):
			case len(ids) == maxIDs:
				more++
			default:
				ids = append(ids, id)
			}
		}
	}
	return ids, more
}

// arrivalView is a look at an arrival as shown to people.
func (ix *indicator) arrivalView(s *series, ep *epoch, l *look) View {
	cfg := ep.cfg
	at := l.occasion.at
	w := ix.arrivalWindow(l.window)
	from, _ := ix.windowFrom(s, w, at)
	judging := ix.judging(at)
	v := View{
		Series: s.name, Indicator: cfg.Name, Window: ix.places[l.window].Name, Arrival: true,
		Start: w.shownFrom(from).in(cfg.Zone), End: at.in(cfg.Zone), Due: at.in(cfg.Zone),
		Made: l.status == made, Status: l.status.String(),
		Events: l.events, Late: l.late, Exposure: l.exposure, Digits: cfg.GrainDigits, Provisional: l.provisional,
		Expected: math.NaN(),
	}
	v.Upper = ViewTail{Watched: true, P: math.NaN(), Log10P: math.NaN(), Limit: s.arrivalLimit(cfg, l.window, judging)}
	if l.status != made {
		return v
	}
	u, based := ix.arrivalJudgedBy(s, l.window, judging)
	o := opportunity{}
	if based && !l.exposure.IsZero() {
		o = ix.spanOpportunity(s, &u, l.exposure, from, at)
	}
	v.weigh(&u, &o, l)
	return v
}

// arrivalViewAt is the span of a window that ends at a moment, as shown to
// people; one without a name where it is still filling.
func (e *Engine) arrivalViewAt(s *series, window int, at Instant) View {
	ix := s.indicator
	judging := ix.judging(at)
	ep := ix.epochAt(judging)
	if !ep.cfg.ArrivalLooks || ep.placed(window) == nil {
		return View{}
	}
	l := ix.lookAtArrival(s, ix.arrivalWindow(window), at, judging, e.clock)
	if l.status == filling || l.status == closed {
		return View{}
	}
	return ix.arrivalView(s, ep, &l)
}

// arrivalViews are the looks of a window at the arrivals in [from, to), oldest
// first.
func (e *Engine) arrivalViews(s *series, window int, from, to Instant) []View {
	if s.arrivals == nil {
		return nil
	}
	var views []View
	for at, n := range s.arrivals.log.Instants(int64(from), min(int64(to)-1, int64(e.clock))) {
		if n.Events == 0 {
			continue
		}
		if v := e.arrivalViewAt(s, window, Instant(at)); v.Window != "" {
			views = append(views, v)
		}
	}
	return views
}

// latestArrival is the moment at which a span that ends now is shown: that of
// the latest event, or when a boundary fell due since.
func (e *Engine) latestArrival(s *series) Instant {
	at := s.indicator.due(s.indicator.looked)
	if s.arrivals == nil {
		return at
	}
	if last, ok := s.arrivals.log.Previous(int64(e.clock) + 1); ok {
		at = max(at, Instant(last))
	}
	return at
}

// arrivalStanding is Standing where looks are made at arrivals only.
func (e *Engine) arrivalStanding(s *series, window int) (life.Evidence, bool) {
	at := e.latestArrival(s)
	v := e.arrivalViewAt(s, window, at)
	if !v.Made || math.IsNaN(v.Expected) || v.Expected == 0 {
		return life.Evidence{}, false
	}
	ev := e.arrivalEvidence(s, window, at)
	ev.Chosen = v.Upper.Signals
	if s.arrivals.log.At(int64(at)).Events == 0 {
		ev.Wait = nil // no event ends it
	}
	return ev, true
}
