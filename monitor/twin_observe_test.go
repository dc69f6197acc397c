package monitor

import (
	"slices"

	"tailbell/config"
)

// element counts or refuses one observation of a message.
func (w *twin) element(m *Message, index int) {
	it := &m.Items[index]
	o := it.Observation
	w.account.Elements++
	reason := it.Reason
	if reason == "" {
		if w.history {
			reason = w.learn(m, o)
		}
		if reason == "" {
			reason = w.observe(o)
		}
	}
	if reason != "" {
		w.account.Refused++
		w.refuse(index, reason)
	}
}

// learn moves the clock to when the observation became known.
func (w *twin) learn(m *Message, o Observation) Reason {
	known := o.End
	switch {
	case m.HasTime:
		known = m.Time
	case o.HasReported:
		known = o.Reported
	case o.Retracted:
		return ""
	}
	ix := w.indicatorOf(o.Series)
	if ix == nil {
		return ""
	}
	_, named := w.ids[[2]string{twinSite(o.Series), o.ID}]
	if w.clock < known && !o.Retracted && (!named || o.ID == "") {
		if end := ix.slots.start(ix.slots.at(o.Start) + 1); end < known.Add(-ix.cfg().Horizon) {
			return BeyondHorizon
		}
	}
	w.advance(known)
	return ""
}

func (w *twin) indicatorOf(series string) *twinIndicator {
	for _, ix := range w.indicators {
		if ix.cfg().Matches(series) {
			return ix
		}
	}
	return nil
}

func (w *twin) observe(o Observation) Reason {
	ix := w.indicatorOf(o.Series)
	key := [2]string{twinSite(o.Series), o.ID}
	if o.ID == "" || ix != nil && !ix.cfg().KeepIDs {
		switch {
		case o.Retracted:
			return NoSuchID
		case ix == nil:
			w.account.Unmonitored++
			return ""
		}
		said, reason := w.admit(ix, o)
		if reason != "" {
			return reason
		}
		if len(w.order) >= w.setup.Limits.MaxSeries && said.series == nil {
			return SeriesFull
		}
		w.count(ix, said, nil)
		return ""
	}
	id := w.ids[key]
	if id == nil {
		switch {
		case ix == nil:
			w.account.Unmonitored++
			return ""
		case o.Retracted:
			return NoSuchID
		}
	} else if o.Revision < id.revision {
		w.account.Outdated++
		return ""
	} else if o.Revision == id.revision {
		if !w.repeats(id, o, ix) {
			return Conflict
		}
		w.account.Repeat++
		return ""
	}
	return w.revise(ix, key, id, o)
}

// revise takes a first or a higher revision of an id.
func (w *twin) revise(ix *twinIndicator, key [2]string, id *twinID, o Observation) Reason {
	next := &twinID{revision: o.Revision, retracted: o.Retracted}
	if ix != nil && !o.Retracted {
		said, reason := w.admit(ix, o)
		if reason != "" {
			return reason
		}
		next.said = said
	}
	var old *twinSaid
	if id != nil {
		if old = id.said; old != nil && w.beyond(old.series.ix, old.first) {
			return BeyondHorizon
		}
		next.forget = id.forget
	}
	if id == nil && len(w.ids) >= w.setup.Limits.MaxIDs {
		return IDsFull
	}
	if next.said != nil && next.said.series == nil && len(w.order) >= w.setup.Limits.MaxSeries {
		return SeriesFull
	}
	if !o.Retracted {
		until := o.End
		if ix != nil { // as long as its slots can change
			until = max(until, ix.slots.start(next.said.last+1))
		}
		forget := w.generationOf(until)
		if next.forget = forget; id != nil {
			next.forget = max(forget, id.forget)
		}
	}
	if ix == nil {
		w.account.Unmonitored++
	}
	w.ids[key] = next
	w.count(ix, next.said, old)
	return ""
}

func (w *twin) repeats(id *twinID, o Observation, ix *twinIndicator) bool {
	switch {
	case id.retracted || o.Retracted:
		return id.retracted == o.Retracted
	case id.said == nil || ix == nil:
		return id.said == nil && ix == nil
	}
	was := id.said.o
	return was.Series == o.Series && was.Start == o.Start && was.End == o.End &&
		was.HasEvents == o.HasEvents && was.Events == o.Events && was.HasExposure == o.HasExposure && was.Exposure == o.Exposure
}

// beyond reports whether the slot ended before the horizon.
func (w *twin) beyond(ix *twinIndicator, slot int64) bool {
	return ix.slots.start(slot+1) < w.clock.Add(-ix.cfg().Horizon)
}

// admit checks an observation against its indicator.
func (w *twin) admit(ix *twinIndicator, o Observation) (*twinSaid, Reason) {
	cfg := ix.cfg()
	c := &twinSaid{series: w.series[o.Series], o: o, first: ix.slots.at(o.Start)}
	c.last = c.first
	if o.End > o.Start {
		c.last = ix.slots.at(o.End - 1)
	}
	proportion := cfg.Measure == config.Proportion
	grains, whole := twinGrains(o.Exposure, cfg.GrainDigits)
	switch {
	case o.End > w.clock.Add(cfg.Ahead):
		return nil, TooFarAhead
	case w.beyond(ix, c.first):
		return nil, BeyondHorizon
	case o.HasExposure && cfg.Exposure == config.Clock:
		return nil, ExposureNotUsed
	case o.HasExposure && o.Instant && !proportion:
		return nil, InstantExposure
	case c.first != c.last && (o.HasEvents || proportion):
		return nil, SpansSlots
	case !whole:
		return nil, FinerThanGrain
	case !grains.IsInt64():
		return nil, TooBig
	}
	var lengths []int64
	for slot := c.first; slot <= c.last; slot++ {
		lengths = append(lengths, int64(min(o.End, ix.slots.start(slot+1))-max(o.Start, ix.slots.start(slot))))
	}
	if c.shares = []int64{grains.Int64()}; c.first != c.last {
		c.shares = twinSpread(grains.Int64(), lengths)
	}
	return c, ""
}

// count takes back what stood and adds what is said now; then every look over
// either is made anew.
func (w *twin) count(ix *twinIndicator, said, old *twinSaid) {
	var touched []*twinSeries
	if old != nil {
		w.account.Replaced++
		w.account.Counted--
		s := old.series
		s.said = slices.DeleteFunc(s.said, func(c *twinSaid) bool { return c == old })
		touched = append(touched, s)
	}
	if ix != nil {
		w.account.Counted++
	}
	if said != nil {
		s := said.series
		if s == nil {
			s = w.bear(ix, said)
		}
		if cfg := ix.cfg(); cfg.Since.IsZero() {
			s.birth = min(s.birth, said.first)
		}
		if said.late = said.first < ix.looked; said.late {
			w.account.Late++
		}
		s.said = append(s.said, said)
		if len(touched) == 0 || touched[0] != s {
			touched = append(touched, s)
		}
	}
	for _, s := range touched {
		before := s.latest()
		w.sum(s)
		w.draw(s)
		changed := w.rebuild(s)
		s.fallBack(before)
		for _, d := range bothTails {
			if len(changed[d]) > 0 {
				w.correct(s, d, changed[d])
			}
		}
	}
}

func (w *twin) bear(ix *twinIndicator, said *twinSaid) *twinSeries {
	s := &twinSeries{name: said.o.Series, ix: ix, birth: said.first, looks: map[lookKey]twinLook{}}
	for _, d := range bothTails {
		s.tails[d].owner, s.tails[d].spent = map[lookKey]*twinAlert{}, map[lookKey]bool{}
	}
	if since := ix.cfg().Since; !since.IsZero() {
		s.birth = ix.slots.at(InstantOf(since))
	}
	w.series[s.name] = s
	w.order = append(w.order, s)
	ix.series = append(ix.series, s)
	said.series = s
	return s
}

// balance is the account as it stands: what lacks its other side is withheld.
func (w *twin) balance() Account {
	a := w.account
	for _, s := range w.order {
		for _, c := range s.said {
			if !s.known(c.first) {
				a.Withheld++
				a.Counted--
			}
		}
	}
	return a
}
