package monitor

import (
	"encoding/binary"
	"fmt"
	"math"

	"tailbell/config"
	"tailbell/monitor/counter"
)

// The sides of a count, as places in a list.
const (
	ofEvents = iota
	ofExposure
	bothTotals
)

// totals are the latest readings of the counters of a series.
type totals [bothTotals]counter.Side

// reading is one while it is counted.
type reading struct {
	at     Instant
	has    [bothTotals]bool
	totals [bothTotals]counter.Reading
	steps  [bothTotals]counter.Step
	// target is the slot in which it ends, and counts what counts there.
	target int64
	counts contribution
	// paired says that both sides are read together, as they were before: what
	// came on either is of the same span, wherever that lies.
	paired bool
}

// read counts a reading of counters: what came since the one before, in the slot
// in which it ends.
func (e *Engine) read(ix *indicator, o *Observation) (Reason, string) {
	if ix == nil {
		e.account.Unmonitored++
		return "", ""
	}
	if reason, detail := ix.reads(o); reason != "" {
		return reason, detail
	}
	short := *o
	short.Start, short.Instant, short.Events = o.End-1, false, 0
	said, reason, detail := e.admit(ix, &short)
	if reason != "" {
		return reason, detail
	}
	var before totals
	if said.series != nil && said.series.totals != nil {
		before = *said.series.totals
	}
	r := readingOf(o, said.exposure, &before)
	r.target, r.counts = ix.cal.Slot(o.End-1), contribution{series: said.series, start: o.End - 1, end: o.End}
	if done, reason, detail := e.unread(r); done || reason != "" {
		return reason, detail
	}
	if step := &r.steps[ofEvents]; r.has[ofEvents] && !said.series.roomFor(r.target, int64(step.More.Lo)) {
		return TooBig, fmt.Sprintf("%d events came since the reading before, a slot holds at most %d: let counting begin again", step.More.Lo, int64(maxEvents))
	}
	if said.series == nil {
		if reason, detail := e.birth(ix, o, &r.counts); reason != "" {
			return reason, detail
		}
	}
	e.countReading(r)
	return "", ""
}

// reads checks that the indicator can count what the counters read.
func (ix *indicator) reads(o *Observation) (Reason, string) {
	switch {
	case o.HasEvents && ix.cfg.ArrivalLooks:
		return NeedsInstant, fmt.Sprintf("indicator %q looks when events come, and a total does not say when they came: send each of them", ix.cfg.Name)
	case o.HasEvents && ix.cfg.Events == config.Each:
		return NeedsCounted, fmt.Sprintf("indicator %q takes silence for no events, but a counter that is not read is missing: set events = \"counted\"", ix.cfg.Name)
	case o.HasExposure && ix.cfg.Exposure == config.Census:
		return ExposureNotUsed, fmt.Sprintf("indicator %q takes levels of a census, not totals: leave exposure_total out, or set exposure = \"reported\"", ix.cfg.Name)
	}
	return "", ""
}

func readingOf(o *Observation, exposure Quantity, before *totals) *reading {
	r := &reading{at: o.End, has: [bothTotals]bool{o.HasEvents, o.HasExposure}}
	amounts := [bothTotals]counter.Amount{{Lo: uint64(o.Events)}, {Hi: exposure.Hi, Lo: exposure.Lo}}
	r.paired = o.HasEvents && o.HasExposure && before[ofEvents].At == before[ofExposure].At
	again := false
	for side := range r.totals {
		r.totals[side] = counter.Reading{At: int64(o.End), Since: int64(o.Since), HasSince: o.HasSince, Total: amounts[side]}
		again = again || r.paired && before[side].Restarted(r.totals[side])
	}
	for side := range r.steps {
		if r.has[side] {
			r.steps[side] = before[side].Next(r.totals[side], again)
		}
	}
	return r
}

// unread deals with a reading that says nothing new.
func (e *Engine) unread(r *reading) (done bool, reason Reason, detail string) {
	news, repeats := false, true
	for side, step := range r.steps {
		switch {
		case !r.has[side]:
		case step.Kind == counter.Conflict:
			return false, Conflict, "the counter was read at this instant already, and said something else: give the instant of each reading"
		default:
			news, repeats = news || step.New(), repeats && step.Kind == counter.Repeat
		}
	}
	switch {
	case news:
		return false, "", ""
	case repeats:
		e.account.Repeat++
	default:
		e.account.Outdated++
	}
	return true, "", ""
}

// countReading counts what came since the reading before, and re-runs the looks
// that this touches.
func (e *Engine) countReading(r *reading) {
	s := r.counts.series
	if s.totals == nil {
		s.totals = new(totals)
	}
	var changes []change
	gap := false
	for side := range r.steps {
		if r.has[side] && r.steps[side].New() {
			change, far := e.side(r, side)
			changes, gap = append(changes, change...), gap || far
		}
	}
	if gap {
		e.account.Gaps++
	}
	if r.counts.hasEvents || r.counts.hasExposure {
		e.account.Counted++
		changes = append(changes, e.add(&r.counts, "", 1))
	} else {
		e.account.Began++
		s.seen = e.clock
		e.heard(s)
		e.touch(s)
	}
	if len(changes) == 0 {
		return
	}
	all := changes[0]
	for _, c := range changes[1:] {
		all = joined(all, c)
	}
	if all.revised {
		e.account.AfterSignOff++
	}
	for _, c := range append([]change{all}, e.sumChanges([]change{all})...) {
		e.rerun(c)
	}
}

// joined is one change for two of the same series.
func joined(a, b change) change {
	c := merge(a, b)[0]
	c.revised, c.reborn, c.birth = a.revised || b.revised, a.reborn || b.reborn, max(a.birth, b.birth)
	return c
}

// side lets one side of a reading count, and makes it the latest one. far says that
// the one before is too far away.
func (e *Engine) side(r *reading, side int) (changes []change, far bool) {
	s, ix, step := r.counts.series, r.counts.series.indicator, r.steps[side]
	latest, start := &s.totals[side], Instant(step.Start)
	known, before := latest.Known, Instant(latest.At)
	far = known && ix.tooFar(before, r.at, r.paired)
	switch {
	case !known || far && step.Kind == counter.Again: // it is known since start, if that is near
		latest.Clear = ix.coveredFrom(start, r.paired)
	case far:
		latest.Clear = ix.coveredFrom(r.at, r.paired)
	}
	unknown := start >= r.at || ix.tooFar(start, r.at, r.paired)
	if known && (far || unknown) && !r.paired {
		changes = e.tear(s, side, ix.cal.Slot(before))
	}
	if unknown {
		latest.Clear = ix.coveredFrom(r.at, r.paired)
	}
	latest.Take(r.totals[side])
	if unknown || r.target < latest.Clear {
		return changes, far
	}
	changes = append(changes, e.pass(s, side, max(latest.Clear, ix.firstWhole(start)), r.target)...)
	if latest.Slot != r.target {
		latest.Slot, latest.Said = r.target, 0
	}
	latest.Said++
	if side == ofEvents {
		r.counts.events, r.counts.hasEvents = int64(step.More.Lo), true
	} else {
		r.counts.exposure, r.counts.hasExposure = Quantity{step.More.Hi, step.More.Lo}, true
	}
	return changes, far
}

// tooFar reports whether what came between two instants has no place among the
// slots: if both sides came in the same span it may cover one slot whole; what
// came on one side alone must lie in one slot, or take half a slot at most.
func (ix *indicator) tooFar(from, to Instant, paired bool) bool {
	if from >= to {
		return false
	}
	if paired {
		return ix.cal.Slot(to)-ix.firstWhole(from) > 1
	}
	last := ix.cal.Slot(to - 1)
	return ix.cal.Slot(from) != last && 2*(to-from) > ix.cal.Start(last+1)-ix.cal.Start(last)
}

// firstWhole is the first slot that begins at the instant or after it.
func (ix *indicator) firstWhole(at Instant) int64 {
	slot := ix.cal.Slot(at)
	if ix.cal.Start(slot) < at {
		slot++
	}
	return slot
}

// coveredFrom is the first slot in which what comes from an instant on may count: a
// part of a slot is as good as a whole one only if both sides are of that part.
func (ix *indicator) coveredFrom(at Instant, paired bool) int64 {
	if paired {
		return math.MinInt64
	}
	return ix.firstWhole(at)
}

// tear takes back the word of readings for a slot that they cover only in part.
func (e *Engine) tear(s *series, side int, slot int64) []change {
	ix, latest := s.indicator, &s.totals[side]
	i, ok := s.cells.find(slot)
	if !ok || latest.Slot != slot || latest.Said == 0 || ix.cal.Start(slot+1) < e.clock.Add(-ix.cfg.Horizon) {
		return nil
	}
	c := &s.cells[i]
	revised := s.revise(c, side == ofEvents, side == ofExposure)
	if side == ofEvents {
		c.saysEvents -= latest.Said
	} else {
		c.saysExposure -= latest.Said
	}
	latest.Said = 0
	e.touchSlot(s, slot)
	torn := change{series: s, from: slot, to: slot, birth: s.birth, revised: revised}
	torn.weighed = side == ofExposure
	return []change{torn}
}

// pass lets a side say nothing more of the slots [from, to), which a reading that
// ends in a later one covers.
func (e *Engine) pass(s *series, side int, from, to int64) []change {
	var changes []change
	for slot := from; slot < to; slot++ {
		c := s.at(slot)
		revised := s.revise(c, side == ofEvents, side == ofExposure)
		if side == ofEvents {
			c.saysEvents++
		} else {
			c.saysExposure++
		}
		e.touchSlot(s, slot)
		ch := e.reborn(s, slot, slot, 1)
		ch.revised, ch.weighed = revised, side == ofExposure
		changes = append(changes, ch)
	}
	return changes
}

func (t *totals) encode(b []byte) []byte {
	if t == nil {
		return b
	}
	for side := range t {
		x := &t[side]
		if b = append(b, flag(x.Known)); !x.Known {
			continue
		}
		b = binary.AppendVarint(b, x.At)
		b = binary.AppendUvarint(b, x.Total.Hi)
		b = binary.AppendUvarint(b, x.Total.Lo)
		b = binary.AppendVarint(b, x.Clear)
		b = binary.AppendVarint(b, x.Slot)
		b = binary.AppendUvarint(b, uint64(x.Said))
	}
	return b
}

func (r *reader) totals() *totals {
	t := new(totals)
	for side := range t {
		if r.flag() {
			t[side] = counter.Side{
				Known: true, At: r.int(), Total: counter.Amount{Hi: r.uint(), Lo: r.uint()},
				Clear: r.int(), Slot: r.int(), Said: uint32(r.uint()),
			}
		}
	}
	return t
}
