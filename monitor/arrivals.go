package monitor

import (
	"encoding/binary"
	"slices"

	"tailbell/config"
	"tailbell/monitor/arrival"
)

// arrivals are the instants at which the events of a series came, where looks
// are made at them.
type arrivals struct {
	log arrival.Log
	// since is the moment before which the log may lack events: they came under
	// a stanza without arrival looks. It is Beginning where there was none.
	since Instant
	// dirty lists the instants changed since the last drain.
	dirty []int64
	// edges are those that the latest look of each window was compared with.
	edges []*edges
}

// occasion is what a look was made at: an arrival, or, as the zero value says,
// a boundary of slots.
type occasion struct {
	arrival bool
	at      Instant
}

// compare orders the occasions of one slot: arrivals as they came, then the
// boundary that ends it.
func (o occasion) compare(p occasion) int {
	switch {
	case o == p:
		return 0
	case o.arrival && (!p.arrival || o.at < p.at):
		return -1
	}
	return 1
}

// arrivalWindow is a window as it ends at an event: a span, or the last trials.
type arrivalWindow struct {
	place  int
	width  int64 // microseconds; 0 of trials
	trials int64
}

// spans are the windows of a stanza as they are looked at when events come; none
// where it does not ask for that.
func (ix *indicator) spans(ep *epoch) []arrivalWindow {
	if !ep.cfg.ArrivalLooks {
		return nil
	}
	list := make([]arrivalWindow, 0, len(ep.windows))
	for _, p := range ep.windows {
		if ep.cfg.Measure == config.Rate || p.Trials > 0 {
			list = append(list, ix.arrivalWindow(p.place))
		}
	}
	return list
}

// arrivalWindow is the window in that place.
func (ix *indicator) arrivalWindow(place int) arrivalWindow {
	w := &ix.places[place]
	return arrivalWindow{place, int64(w.Slots) * ix.cal.nominal(), w.Trials}
}

// nominal is the length of a slot in microseconds when no clock is changed.
// Months and years have none: the set-up refuses arrival looks over them.
func (c *Calendar) nominal() int64 {
	switch {
	case c.length > 0:
		return c.length
	case c.every.Unit == config.Week:
		return 7 * day
	}
	return day
}

// widest is the longest span that a look inside the horizon is made over.
func (ix *indicator) widest() int64 {
	var widest int64
	for i := range ix.epochs {
		for _, w := range ix.spans(&ix.epochs[i]) {
			widest = max(widest, w.width)
		}
	}
	return widest
}

// arrived notes that the events, and of a proportion the trials, of a contribution
// came at its instant (sign 1), or takes them back (-1), for the change that this
// is.
func (s *series) arrived(c *contribution, sign int, ch *change) {
	cfg := s.indicator.cfg
	var by arrival.Count
	if c.hasEvents {
		by.Events = c.events
	}
	if c.hasExposure && cfg.Measure == config.Proportion {
		by.Trials = int64(c.exposure.Lo)
	}
	ch.weighed = c.hasExposure && cfg.Measure == config.Rate
	if !cfg.ArrivalLooks || by == (arrival.Count{}) {
		return
	}
	if s.arrivals == nil {
		s.arrivals = &arrivals{since: Beginning}
	}
	a := s.arrivals
	if c.start <= a.since { // no look sees it
		return
	}
	if c.late {
		by.Late = by.Events
	}
	if sign < 0 {
		by = by.Minus()
	} else if by.Events > 0 && a.log.At(int64(c.start)).Events == 0 {
		ch.came, ch.comes = c.start, true
	}
	if err := a.log.Change(int64(c.start), by); err != nil {
		panic(err) // what is taken back was counted, inside the horizon
	}
	a.dirty = append(a.dirty, int64(c.start))
	ch.instants = append(ch.instants, c.start)
}

// keepArrivals begins to keep the instants of events where a new stanza asks
// for it, and forgets them where it no longer does.
func (e *Engine) keepArrivals(ix *indicator, old *config.Indicator) {
	for _, s := range ix.series {
		switch {
		case s.sum != nil:
		case ix.cfg.ArrivalLooks && s.arrivals == nil:
			s.arrivals = &arrivals{since: e.clock.Add(max(old.Ahead, ix.cfg.Ahead))}
			e.touch(s)
		case !ix.cfg.ArrivalLooks && s.arrivals != nil:
			s.arrivals = nil
			s.tails[upper].settleArrivals()
			e.touch(s)
		}
	}
}

// drainArrivals notes that what changed was handed over.
func (s *series) drainArrivals() {
	if s.arrivals != nil {
		s.arrivals.dirty = s.arrivals.dirty[:0]
	}
}

// settleArrivals forgets the looks at arrivals: they are as beyond the horizon.
func (t *tail) settleArrivals() {
	t.lit = slices.DeleteFunc(t.lit, func(l litLook) bool {
		if l.occasion.arrival && l.alert != nil {
			l.alert.frozen = true
		}
		return l.occasion.arrival
	})
}

// forgetArrivals drops the instants that no look inside the horizon sees. It
// reports whether there were any.
func (s *series) forgetArrivals() bool {
	if s.arrivals == nil {
		return false
	}
	l := &s.arrivals.log
	n := l.Len()
	l.Forget(s.keptFrom())
	return l.Len() < n
}

// encodeArrivals writes the instants, all or those that changed, then what the
// limits and the upper tail hold of arrival looks.
func (s *series) encodeArrivals(b []byte, whole bool) []byte {
	a := s.arrivals
	if a == nil {
		return b
	}
	var log []byte
	if whole {
		log, _ = a.log.AppendBinary(nil) //nolint:errcheck // always nil
	} else {
		slices.Sort(a.dirty)
		a.dirty = slices.Compact(a.dirty)
		log = a.log.AppendPatch(nil, a.dirty)
	}
	b = append(b, flag(whole))
	b = appendString(b, string(log))
	b = binary.AppendVarint(b, int64(a.since))
	for i := range s.limits {
		b = binary.AppendUvarint(b, uint64(len(s.limits[i].arrival)))
		for _, alpha := range s.limits[i].arrival {
			b = appendFloat(b, alpha)
		}
	}
	t := &s.tails[upper]
	for _, a := range t.all() {
		b = a.worstAt.encode(a.openingAt.encode(b))
	}
	for i := range t.lit {
		b = t.lit[i].occasion.encode(b)
	}
	return b
}

func (o occasion) encode(b []byte) []byte {
	if b = append(b, flag(o.arrival)); o.arrival {
		b = binary.AppendVarint(b, int64(o.at))
	}
	return b
}

func (r *reader) occasion() occasion {
	if !r.flag() {
		return occasion{}
	}
	return occasion{true, Instant(r.int())}
}

// arrivals lays what encodeArrivals wrote over the series.
func (r *reader) arrivals(s *series, e *Engine) {
	if s.arrivals == nil {
		s.arrivals = &arrivals{}
	}
	a := s.arrivals
	whole := r.flag()
	log := []byte(r.string())
	if r.err != nil {
		return
	}
	err := error(nil)
	if whole {
		err = a.log.UnmarshalBinary(log)
	} else {
		err = a.log.Patch(log)
	}
	if err != nil {
		r.fail(err.Error())
		return
	}
	a.since = Instant(r.int())
	for i := range s.limits {
		x := *s.limits[i].solution
		x.arrival = make([]float64, r.length())
		for j := range x.arrival {
			x.arrival[j] = r.float()
		}
		s.limits[i].solution = e.share(x)
	}
	t := &s.tails[upper]
	for _, a := range t.all() {
		a.openingAt, a.worstAt = r.occasion(), r.occasion()
	}
	for i := range t.lit {
		t.lit[i].occasion = r.occasion()
	}
}
