package monitor

import (
	"math"
	"slices"
	"time"
)

// View is one look as shown to people: what it saw and how it was judged.
type View struct {
	Series, Indicator, Window string
	// Arrival says that the look was made when an event came: its span is (Start,
	// End].
	Arrival bool
	// Start and End bound the span [Start, End) and Due is when the look fell
	// due, all in the indicator's zone.
	Start, End, Due time.Time
	// Made says that the look was tested; Status is "made", or says why it was
	// not.
	Made   bool
	Status string
	// Events were counted, Late of them after their slots had settled, in
	// Exposure with so many decimal Digits; of Provisional slots the exposure
	// was carried forward. Of a look that was not made they are what is known.
	Events, Late int64
	Exposure     Quantity
	Digits       int
	Provisional  int64
	// SignedOff says that people have declared all counts of the look final.
	SignedOff bool
	// Expected is how many events the baseline would bring, NaN where there is
	// none or the look was not made.
	Expected float64
	Upper    ViewTail
	Lower    ViewTail
}

// ViewTail is one direction of a look.
type ViewTail struct {
	// Watched says that the set-up asks for this tail; the rest is filled in
	// then only. Signals says that the look signals in it.
	Watched, Signals bool
	// P is the one-sided p-value, Log10P its logarithm, which is right where P
	// itself is too small for a number; NaN of a look that was not made. Limit
	// is the p at or under which it signals.
	P, Log10P, Limit float64
	// Critical is the count at which the look signals; HasCritical is false
	// where none can, or the look was not made.
	Critical    int64
	HasCritical bool
}

// OnLook calls f for every look that is made, or withheld, when it falls due,
// in the order in which the engine makes them: by due time, indicator,
// boundary, series (by number) and window. Windows that are still filling are
// no looks, and looks that are made again are not told: Views shows how they
// came out. A nil f stops it. f must not call the engine.
func (e *Engine) OnLook(f func(View)) {
	e.rouseAll()
	e.onLook = f
}

// Views returns the looks of a window of a series whose boundaries lie in
// [from, to), oldest first, as the data now stand: those that fell due and
// whose slots are still in memory. It returns nil where series or window are
// unknown. Which tails of a look inside the horizon signal is what the engine
// has found.
func (e *Engine) Views(series, window string, from, to time.Time) []View {
	s := e.byName[series]
	if s == nil || !s.indicator.started || s.birth == unborn {
		return nil
	}
	s.catchUp()
	ix := s.indicator
	p := ix.named(window)
	if p == nil {
		return nil
	}
	w, cfg := p.place, p.Window
	first := max(max(s.birth, s.trimmed, p.whole)+int64(cfg.Slots), p.since)
	if s.dates != nil { // some may be shorter
		first = max(s.birth, s.trimmed, p.since-1) + 1
	}
	views := e.arrivalViews(s, w, InstantOf(from), InstantOf(to))
	if at := ix.cal.Slot(InstantOf(from)); at > first {
		first = at
	}
	for b := first; b <= ix.looked; b++ {
		start := ix.cal.Start(b)
		if start >= InstantOf(to) {
			break
		}
		if start < InstantOf(from) || !ix.epochAt(b).cfg.SlotLooks || !ix.looksAt(cfg, b) {
			continue
		}
		ep := ix.epochAt(b)
		l := ix.look(s, ep, w, b, e.momentOf(s, b, w))
		if l.status == filling || l.status == closed {
			continue
		}
		v := ix.view(s, ep, &l)
		if b > ix.frozenAt {
			_, v.Upper.Signals = s.tails[upper].litAt(b, w)
			_, v.Lower.Signals = s.tails[lower].litAt(b, w)
		}
		views = append(views, v)
	}
	if s.arrivals != nil {
		slices.SortStableFunc(views, func(a, b View) int { return a.End.Compare(b.End) })
	}
	return views
}

// momentOf is as of when a look is shown: when it was made if it signals, else
// as of now, with what is known now.
func (e *Engine) momentOf(s *series, boundary int64, window int) Instant {
	for d := range s.tails {
		t := &s.tails[d]
		if i, ok := t.litAt(boundary, window); ok {
			return t.lit[i].at
		}
	}
	return max(e.clock, s.indicator.due(boundary))
}

// view is a look as shown to people.
func (ix *indicator) view(s *series, ep *epoch, l *look) View {
	cfg := ep.cfg
	from := ix.spanFrom(s, l.boundary, ix.places[l.window].Slots)
	v := View{
		Series: s.name, Indicator: cfg.Name, Window: ix.places[l.window].Name,
		Start: ix.cal.Start(from).in(cfg.Zone), End: ix.cal.Start(l.boundary).in(cfg.Zone), Due: ix.due(l.boundary).in(cfg.Zone),
		Made: l.status == made, Status: l.status.String(),
		Events: l.events, Late: l.late, Exposure: l.exposure, Digits: cfg.GrainDigits, Provisional: l.provisional,
		Expected: math.NaN(), SignedOff: ix.isSigned(s, from, l.boundary),
	}
	v.Upper.Watched, v.Lower.Watched = cfg.Upper, cfg.Lower
	limit := s.limitsAt(cfg, l.window, l.boundary)
	for d, tail := range []*ViewTail{&v.Upper, &v.Lower} {
		if tail.Watched {
			tail.P, tail.Log10P, tail.Limit = math.NaN(), math.NaN(), limit[d]
		}
	}
	if l.status != made {
		return v
	}
	u, based := ix.judgedBy(s, ep, l.window, l.boundary)
	o := opportunity{}
	if based && !l.exposure.IsZero() {
		o = ix.opportunity(s, &u, &l.tally, from, l.boundary, l.at)
	}
	v.weigh(&u, &o, l)
	return v
}

// weigh fills in how the look was judged.
func (v *View) weigh(u *usual, o *opportunity, l *look) {
	if o.weighted == 0 { // nothing could happen, or be known
		v.Expected = 0
		v.Upper.certain()
		v.Lower.certain()
		return
	}
	v.Expected = expected(u, o)
	if v.Upper.Watched {
		v.Upper.fill(newLaw(u, upper, o), upper, l)
	}
	if v.Lower.Watched {
		v.Lower.fill(newLaw(u, lower, o), lower, l)
	}
}

// certain is the tail of a look at which nothing could happen.
func (t *ViewTail) certain() {
	if t.Watched {
		t.P, t.Log10P = 1, 0
	}
}

func (t *ViewTail) fill(p law, d direction, l *look) {
	t.Signals = l.lit[d]
	tail, log := p.Upper, p.LogUpper
	if d == lower {
		tail, log = p.Lower, p.LogLower
	}
	const underflow = 1e-280 // the logarithm is taken for itself from there on
	if t.P = tail(l.events); t.P > underflow {
		t.Log10P = math.Log10(t.P)
	} else {
		t.Log10P = log(l.events) / math.Ln10
	}
	if d == upper {
		t.Critical, _, t.HasCritical = p.CriticalUpper(t.Limit)
	} else {
		t.Critical, _, t.HasCritical = p.CriticalLower(t.Limit)
	}
}
