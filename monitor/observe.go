package monitor

import (
	queue "container/heap"
	"fmt"
	"slices"

	"tailbell/config"
)

// maxSpread is the largest number of slots over which one exposure may be
// spread.
const maxSpread = 10_000

// observe counts one observation, or says why it is refused. A refused one
// leaves no trace but its refusal.
func (e *Engine) observe(o *Observation) (Reason, string) {
	if e.partition.Of > 1 && config.PartitionOf(o.Series, e.partition.KeyParts, e.partition.Of) != e.partition.Number {
		return Stray, fmt.Sprintf("series %q belongs to partition %d: publish it there",
			o.Series, config.PartitionOf(o.Series, e.partition.KeyParts, e.partition.Of))
	}
	ix, other := e.indicatorOf(o.Series)
	if other != nil {
		return Ambiguous, fmt.Sprintf("series %q is claimed by indicators %q and %q: narrow their patterns",
			o.Series, ix.cfg.Name, other.cfg.Name)
	}
	if o.Reading {
		return e.read(ix, o)
	}
	key, old, done, reason, detail := e.identify(ix, o)
	if done || reason != "" {
		return reason, detail
	}
	var said contribution
	if ix != nil && !o.Retracted {
		said, reason, detail = e.admit(ix, o)
		if reason != "" {
			return reason, detail
		}
	}
	if old != nil && old.said.series != nil && e.isFrozen(&old.said) {
		return BeyondHorizon, fmt.Sprintf("revision %d of id %q stands in a slot that can't change any more", old.revision, o.ID)
	}
	if key.id != "" && (ix != nil || old != nil) {
		if old == nil && e.ids.count >= e.ids.max && !e.ids.has(key) {
			return IDsFull, fmt.Sprintf("%d ids are kept already: raise limits.max_ids", e.ids.max)
		}
	}
	if said.series == nil && ix != nil && !o.Retracted {
		if reason, detail = e.birth(ix, o, &said); reason != "" {
			return reason, detail
		}
	}
	e.count(o, ix, key, old, said)
	return "", ""
}

// named returns the series of this name, nil for none. The one asked for last
// is often asked for again, or the one that came after it the last time, and by
// the very same text.
func (e *Engine) named(name string) *series {
	last := e.recent
	switch {
	case last == nil:
	case last.name == name:
		return last
	case last.next != nil && last.next.name == name && !last.next.retired:
		e.recent = last.next
		return last.next
	}
	s := e.byName[name]
	if s != nil {
		if last != nil {
			last.next = s
		}
		e.recent = s
	}
	return s
}

// indicatorOf returns the indicator that monitors the series, nil for none,
// and a second one if it is claimed twice.
func (e *Engine) indicatorOf(name string) (ix, other *indicator) {
	if s := e.named(name); s != nil {
		return s.indicator, nil
	}
	for _, candidate := range e.indicators {
		if !candidate.cfg.Matches(name) {
			continue
		}
		if ix != nil {
			return ix, candidate
		}
		ix = candidate
	}
	return ix, nil
}

// identify finds what the observation's id said before. done says that the
// observation is dealt with: a repeat, or outdated, or unmonitored.
func (e *Engine) identify(ix *indicator, o *Observation) (key idKey, old *identified, done bool, reason Reason, detail string) {
	if o.ID == "" || (ix != nil && !ix.cfg.KeepIDs) {
		if o.Retracted {
			return key, nil, false, NoSuchID, "its indicator keeps no ids, so nothing can be retracted by id"
		}
		if ix == nil {
			e.account.Unmonitored++
		}
		return key, nil, ix == nil, "", ""
	}
	key = idKey{siteOf(o.Series), o.ID}
	if old = e.ids.get(key, e.series); old != nil && old.gone() {
		old = nil
	}
	switch {
	case old == nil && ix == nil:
		e.account.Unmonitored++
		return key, nil, true, "", ""
	case old == nil && o.Retracted:
		return key, nil, false, NoSuchID, fmt.Sprintf("id %q was never counted here under %q, or lies beyond the horizon", o.ID, key.site)
	case old == nil || o.Revision > old.revision:
		return key, old, false, "", ""
	case o.Revision < old.revision:
		e.account.Outdated++
		return key, old, true, "", ""
	case e.same(ix, o, old):
		e.account.Repeat++
		return key, old, true, "", ""
	}
	return key, old, false, Conflict, fmt.Sprintf("revision %d of id %q said something else before: give the correction a higher revision", o.Revision, o.ID)
}

// same reports whether the observation says what its id said before.
func (e *Engine) same(ix *indicator, o *Observation, old *identified) bool {
	if o.Retracted || old.retracted {
		return o.Retracted == old.retracted
	}
	was := &old.said
	if was.series == nil || ix == nil {
		return was.series == nil && ix == nil
	}
	exposure, reason := quantityOf(o.Exposure, ix.cfg.GrainDigits)
	return reason == "" && (was.series.name == o.Series || was.series == ghost) && was.start == o.Start && was.end == o.End &&
		was.hasEvents == o.HasEvents && was.events == o.Events &&
		was.hasExposure == o.HasExposure && was.exposure == exposure
}

// admit checks the observation against its indicator and returns what it
// would add; its series is nil if it is new.
func (e *Engine) admit(ix *indicator, o *Observation) (contribution, Reason, string) {
	c := contribution{
		series: e.named(o.Series), start: o.Start, end: o.End,
		events: o.Events, hasEvents: o.HasEvents, hasExposure: o.HasExposure,
	}
	if e.clock != Beginning && o.End > e.clock.Add(ix.cfg.Ahead) {
		return c, TooFarAhead, fmt.Sprintf("it ends %s, more than %s after the stream's clock %s", at(o.End), config.FormatDuration(ix.cfg.Ahead), at(e.clock))
	}
	from, to := ix.slotsOf(&c)
	if e.clock != Beginning && ix.cal.Start(from+1) < e.clock.Add(-ix.cfg.Horizon) {
		return c, BeyondHorizon, fmt.Sprintf("its slot ended %s, more than the horizon of %s before the stream's clock %s",
			at(ix.cal.Start(from+1)), config.FormatDuration(ix.cfg.Horizon), at(e.clock))
	}
	if reason, detail := ix.fits(o, from, to); reason != "" {
		return c, reason, detail
	}
	if reason, detail := e.shut(ix, c.series, o.Series, from, to); reason != "" {
		return c, reason, detail
	}
	var reason Reason
	c.exposure, reason = quantityOf(o.Exposure, ix.cfg.GrainDigits)
	if reason == FinerThanGrain {
		return c, reason, fmt.Sprintf("exposure %s has more than the %d decimals that the indicator's grain holds", o.Exposure, ix.cfg.GrainDigits)
	}
	if reason == TooBig {
		return c, reason, fmt.Sprintf("exposure %s is too large for the indicator's grain", o.Exposure)
	}
	if ix.cfg.ArrivalLooks && ix.cfg.Measure == config.Proportion && (c.exposure.Hi > 0 || c.exposure.Lo > maxEvents) {
		return c, TooBig, fmt.Sprintf("a moment holds at most %d trials", int64(maxEvents))
	}
	if o.HasEvents && !c.series.roomFor(from, o.Events) {
		return c, TooBig, fmt.Sprintf("a slot holds at most %d events", int64(maxEvents))
	}
	return c, "", ""
}

// fits checks that what the observation reports can be counted in its slots.
func (ix *indicator) fits(o *Observation, from, to int64) (Reason, string) {
	proportion := ix.cfg.Measure == config.Proportion
	switch {
	case o.HasExposure && ix.cfg.Exposure == config.Clock:
		return ExposureNotUsed, fmt.Sprintf("indicator %q takes its exposure from the clock: leave exposure out", ix.cfg.Name)
	case o.HasExposure && o.Instant && !proportion:
		return InstantExposure, "exposure needs an interval: give start and end instead of at"
	case ix.cfg.ArrivalLooks && proportion && !o.Instant && o.HasExposure && o.Exposure.Coef > 0:
		return NeedsInstant, fmt.Sprintf("indicator %q looks at the last trials: give at instead of start and end", ix.cfg.Name)
	case ix.cfg.ArrivalLooks && o.Events > 0 && !o.Instant:
		return NeedsInstant, fmt.Sprintf("indicator %q looks when events come: give at instead of start and end", ix.cfg.Name)
	case from != to && o.HasEvents:
		return SpansSlots, fmt.Sprintf("events can't be spread over %d slots of %s: send them slot by slot", to-from+1, ix.cfg.Every)
	case from != to && proportion:
		return SpansSlots, fmt.Sprintf("trials can't be spread over %d slots of %s: send them slot by slot", to-from+1, ix.cfg.Every)
	case to-from >= maxSpread:
		return TooBig, fmt.Sprintf("its interval covers %d slots, more than %d: send it in shorter pieces", to-from+1, maxSpread)
	}
	return "", ""
}

// shut refuses what is said of a time for which the series was closed.
func (e *Engine) shut(ix *indicator, s *series, name string, from, to int64) (Reason, string) {
	var d *dates
	switch {
	case s != nil:
		d = s.dates
	case len(e.facts) > 0:
		d = e.datesOf(ix, name)
	}
	if d.isOpen(from) && d.isOpen(to) {
		return "", ""
	}
	return SeriesClosed, fmt.Sprintf("series %q was closed then: open it from an earlier date, or name the series that took its place", name)
}

// maxEvents is the most events that a slot holds: a window of a hundred
// thousand slots can't overflow.
const maxEvents = 1 << 45

func (s *series) roomFor(slot, events int64) bool {
	if s == nil {
		return events <= maxEvents
	}
	i, ok := s.cells.find(slot)
	return events <= maxEvents && (!ok || s.cells[i].events <= maxEvents-events)
}

// slotsOf returns the first and last slot that the contribution touches.
func (ix *indicator) slotsOf(c *contribution) (from, to int64) {
	from = ix.cal.Slot(c.start)
	if c.end <= c.start+1 {
		return from, from
	}
	return from, ix.cal.Slot(c.end - 1)
}

// isFrozen reports whether what was counted can't be taken back any more.
func (e *Engine) isFrozen(c *contribution) bool {
	if c.series.retired {
		return true // it ended when all that it had was
	}
	ix := c.series.indicator
	from, _ := ix.slotsOf(c)
	return ix.cal.Start(from+1) < e.clock.Add(-ix.cfg.Horizon)
}

// birth makes the series of a first observation.
func (e *Engine) birth(ix *indicator, o *Observation, c *contribution) (Reason, string) {
	if limit := e.setup.Limits.MaxSeries; e.living+len(e.newSums(ix, o.Series)) >= limit {
		return SeriesFull, fmt.Sprintf("%d series are monitored already: raise limits.max_series", limit)
	}
	c.series = e.enter(ix, o.Series)
	e.link(c.series)
	e.inheritAgain(c.series)
	return "", ""
}

// enter makes a series.
func (e *Engine) enter(ix *indicator, name string) *series {
	s := &series{
		name: name, indicator: ix, birth: unborn,
		trimmed: -1 << 62, windows: make([]windowState, len(ix.places)), fresh: true, alarm: noAlarm,
		dates: e.datesOf(ix, name),
	}
	e.comeBack(s)
	s.number = e.number()
	if int(s.number) < len(e.series) {
		e.series[s.number] = s
	} else {
		e.series = append(e.series, s)
	}
	e.living++
	e.byName[s.name] = s
	if n := len(ix.series); n > 0 && ix.series[n-1].number > s.number {
		ix.shuffled = true
	}
	ix.series = append(ix.series, s)
	ix.resters.awake.add(s.number)
	e.bequeath(s)
	e.touch(s)
	if within := ix.cfg.SilentFor(name); within > 0 && !e.passing && e.clock != Beginning {
		queue.Push(&e.deadlines, deadline{e.clock.Add(within), s})
	}
	return s
}

// count takes back what the id said before, adds what it says now, and
// re-runs the looks that either touched.
func (e *Engine) count(o *Observation, ix *indicator, key idKey, old *identified, said contribution) {
	var room [2]change
	changes := room[:0]
	if old != nil && old.said.series != nil {
		e.account.Replaced++
		e.account.Counted--
		changes = append(changes, e.add(&old.said, key.id, -1))
	}
	if ix == nil {
		e.account.Unmonitored++
	} else {
		e.account.Counted++
	}
	if said.series != nil {
		changes = append(changes, e.add(&said, key.id, 1))
	}
	if slices.ContainsFunc(changes, func(c change) bool { return c.revised }) {
		e.account.AfterSignOff++
	}
	if key.id != "" {
		e.remember(o, key, old, &said)
	}
	if len(changes) == 2 && changes[0].series == changes[1].series {
		changes = merge(changes[0], changes[1])
	}
	for _, c := range append(changes, e.sumChanges(changes)...) {
		e.rerun(c)
	}
}

func merge(a, b change) []change {
	b.from, b.to = min(a.from, b.from), max(a.to, b.to)
	b.comes = b.comes && !slices.Contains(a.instants, b.came) // it was there before
	b.instants, b.weighed = append(a.instants, b.instants...), a.weighed || b.weighed
	return []change{b}
}

// remember keeps what the id says now, for as long as its slots can change.
func (e *Engine) remember(o *Observation, key idKey, old *identified, said *contribution) {
	entry := identified{key: key, revision: o.Revision, retracted: o.Retracted, said: *said}
	switch {
	case !o.Retracted:
		until := o.End
		if said.series != nil {
			ix := said.series.indicator
			_, to := ix.slotsOf(said)
			until = max(until, ix.cal.Start(to+1))
		}
		entry.generation = e.ids.generationOf(until)
		if old != nil {
			entry.generation = max(entry.generation, old.generation)
		}
	default:
		entry.generation = old.generation
	}
	e.ids.put(&entry)
}

// add adds a contribution to its slots (sign 1), or takes it back (-1).
func (e *Engine) add(c *contribution, id string, sign int) change {
	s, ix := c.series, c.series.indicator
	from, to := ix.slotsOf(c)
	shares := []Quantity{c.exposure}
	if from != to && c.hasExposure {
		shares = c.exposure.spread(ix.overlaps(c, from, to))
	}
	if sign > 0 {
		if c.late = from < ix.looked; c.late {
			e.account.Late++
		}
		s.seen = e.clock
		e.heard(s)
	}
	revised := false
	for slot := from; slot <= to; slot++ {
		cell := s.at(slot)
		revised = s.revise(cell, c.hasEvents, c.hasExposure) || revised
		if slot == from {
			cell.items += uint32(sign)
		}
		if c.hasEvents {
			cell.saysEvents += uint32(sign)
			cell.events += int64(sign) * c.events
			if c.late {
				cell.late += int64(sign) * c.events
			}
			if id != "" && c.events > 0 {
				s.eventIDs.list(slot, id, sign)
			}
		}
		if c.hasExposure {
			cell.saysExposure += uint32(sign)
			cell.exposure = cell.exposure.signed(shares[slot-from], sign)
		}
		e.touchSlot(s, slot)
	}
	ch := e.reborn(s, from, to, sign)
	ch.revised = revised
	s.arrived(c, sign, &ch)
	return ch
}

// carriedTo is the last slot that a change reaches: its own, or where levels
// of exposure are carried forward the last one that its level would serve.
func (ix *indicator) carriedTo(c *change) int64 {
	if c.series.exposureFrom() != config.Census {
		return c.to
	}
	next, _ := c.series.cells.find(c.to + 1)
	to := c.to
	for to < ix.looked && ix.carries(c.to, to+1) {
		if next < len(c.series.cells) && c.series.cells[next].slot == to+1 {
			if c.series.cells[next].saysExposure > 0 {
				break
			}
			next++
		}
		to++
	}
	return to
}

// overlaps returns how long the contribution's interval lies in each slot.
func (ix *indicator) overlaps(c *contribution, from, to int64) []uint64 {
	weights := make([]uint64, to-from+1)
	for slot := from; slot <= to; slot++ {
		begin, end := max(c.start, ix.cal.Start(slot)), min(c.end, ix.cal.Start(slot+1))
		weights[slot-from] = uint64(end - begin)
	}
	return weights
}

// reborn moves the series' birth back if the slots lie before it.
func (e *Engine) reborn(s *series, from, to int64, sign int) change {
	ix := s.indicator
	c := change{series: s, from: from, to: to, birth: s.birth}
	if sign < 0 {
		return c
	}
	birth := from
	if !ix.cfg.Since.IsZero() {
		birth = ix.cal.Slot(InstantOf(ix.cfg.Since))
	}
	if birth < s.birth {
		s.birth, c.reborn = birth, true
		c.from = min(from, max(birth, ix.frozenAt))
	}
	return c
}

func at(i Instant) string { return i.Time().Format("2006-01-02T15:04:05Z07:00") }
