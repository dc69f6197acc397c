package monitor

import (
	"slices"

	"tailbell/config"
)

// Holds reports whether a message can't be applied yet: in history time the clock
// would pass the first boundary of a day for which another partition has not told
// what it counted the day before, or another set-up would come into force before
// gathered sums have been looked at up to its moment. The caller then commits what
// Drain hands over, looks for summaries further ahead in the stream, gives them to
// ApplyAhead, and asks again; it must not give any other message to Apply meanwhile.
//
// Before it says so the engine goes as far as it may: it applies those of a
// message's observations that lie before that moment, and brings its clock up to
// just before it, so that the other partitions are told what they wait for. All of
// that is part of the state that is stored, and what was applied is not applied
// again, also after a restart. Once the partition is live nothing is held, but for
// what a division carried over: when that was first read the others had told in time.
func (e *Engine) Holds(m *Message) bool {
	if e.partition.Of <= 1 || m.Position <= e.position || !m.Carried && (!e.history || m.Kind == Live) {
		return false
	}
	e.heldSums = nil
	e.holding = e.holds(m) || e.holdsSetup(m)
	return e.holding
}

// holdsSetup reports whether the message is another set-up that waits for gathered
// sums: those that it ends, or looks at by other rules, are to have come to its moment
// as they had in one partition. The clock goes there first. What partitions tell up to
// that moment waits for nobody, and each of them has the set-up. In history time they
// have it at different moments if it tells none itself: then it is not held. In live
// time they may, too: there it waits for sums that it ends alone, since a partition that
// ends them says so.
func (e *Engine) holdsSetup(m *Message) bool {
	if m.Kind != SettingMessage || e.setup == nil || e.setup.Digest == m.Setting.Setup.Digest {
		return false
	}
	at, list := m.Stored, e.dismissed(m.Setting.Setup)
	if e.history {
		at, list = m.Time, e.indicators
	}
	if e.history && !m.HasTime {
		return false
	}
	e.advance(at)
	for _, ix := range list {
		if up := ix.summing(); up != nil && e.behind(up, at) {
			e.heldSums = append(e.heldSums, ix)
		}
	}
	return len(e.heldSums) > 0
}

func (e *Engine) holds(m *Message) bool {
	if e.clock == Beginning && !e.countsAny() || e.clock != Beginning && e.heldFrom() == Never {
		return false
	}
	if !e.history || m.Kind == Live {
		return e.staysHeld(m.Stored, m.Stored > e.clock)
	}
	if m.Kind != Observations {
		return e.holdsAt(m)
	}
	for i := e.part; i < len(m.Items); i++ {
		if e.clock != Beginning && e.heldFrom() > m.timeOf(&m.Items[i].Observation) {
			continue
		}
		for ; e.part < i; e.part++ { // they may have a say in what this one does
			e.element(m, e.part)
		}
		at, moves := e.movesTo(m, i)
		if moves && e.clock == Beginning {
			e.advance(at)
		}
		if e.staysHeld(at, moves) {
			return true
		}
	}
	return false
}

// staysHeld reports whether what moves the clock to a moment is held when the clock
// has gone as far as it may.
func (e *Engine) staysHeld(at Instant, moves bool) bool {
	for e.isHeld(at, moves) {
		from := e.heldFrom()
		switch {
		case from == Beginning || from-1 <= e.clock && e.nextDue >= from:
			return true
		case from-1 <= e.clock:
			e.lookBefore(from)
		default:
			e.advance(from - 1)
		}
	}
	return false
}

// holdsAt is holds for a message of one moment. An act may carry that itself.
func (e *Engine) holdsAt(m *Message) bool {
	at, moves := m.Time, m.HasTime
	if !moves && m.Kind == ActMessage {
		at, moves = m.Act.At, m.Act.HasAt
	}
	switch {
	case moves && e.clock == Beginning:
		e.advance(at)
	case !moves && m.Kind != ActMessage: // it moves no clock, nor is anything counted
		return false
	}
	return e.staysHeld(at, moves)
}

// isHeld reports whether what moves the clock to a moment, or does not move it at
// all, is held.
func (e *Engine) isHeld(at Instant, moves bool) bool {
	if e.clock == Beginning {
		return false // nothing is looked at yet
	}
	from := e.heldFrom()
	return from == Beginning || moves && at >= from
}

// movesTo is the moment to which an observation moves the clock of history time,
// and whether it does.
func (e *Engine) movesTo(m *Message, index int) (Instant, bool) {
	it := &m.Items[index]
	if it.Reason != "" {
		return Beginning, false
	}
	known, reason, _ := e.timeOf(m, &it.Observation)
	return known, reason == "" && known > e.clock
}

// reheld notes that from which moment on messages are held may have changed.
func (e *Engine) reheld() { e.heldStale = true }

// heldFrom is the moment from which on messages of history time are held: Beginning
// for all of them, Never for none.
func (e *Engine) heldFrom() Instant {
	if !e.heldStale {
		return e.held
	}
	e.held, e.heldStale = Never, false
	for _, ix := range e.indicators {
		e.held = min(e.held, e.heldBy(ix))
	}
	return e.held
}

// heldBy is the moment from which on the indicator holds messages.
func (e *Engine) heldBy(ix *indicator) Instant {
	_, from := e.needed(ix)
	return from
}

// needed is the boundary that others must have told of before messages from a
// moment on can be applied; Never where nothing is held.
func (e *Engine) needed(ix *indicator) (boundary int64, from Instant) {
	k := ix.counting
	if k == nil || !ix.started {
		return never, Never
	}
	if !k.strict {
		if !k.allBegun() {
			return never, Never
		}
		k.strict = true
		e.countsChanged()
	}
	told, today := k.complete(e.partition.Number), ix.dayBegins(ix.looked)
	switch {
	case told == maxBoundary:
		return never, Never
	case told < ix.dayBefore(today):
		return ix.dayBefore(today), Beginning
	case told < today:
		boundary = today
	default:
		boundary = ix.dayAfter(ix.dayBegins(min(told, ix.looked+farAhead)))
	}
	return boundary, ix.due(ix.dayAfter(boundary))
}

// farAhead is how many slots beyond what was looked at are thought of at once.
const farAhead = 1 << 16

func (k *counting) allBegun() bool {
	return !slices.ContainsFunc(k.told(), func(l countLane) bool { return !l.Begun })
}

func (e *Engine) countsAny() bool {
	return slices.ContainsFunc(e.indicators, func(ix *indicator) bool { return ix.counting != nil })
}

// ApplyAhead applies a summary that was found further ahead in the stream while
// Holds says that the next message can't be applied. Neither position nor clock
// move; when the main reading comes to it, Apply passes over it. Summaries must
// come in order of their positions, none left out; those that came before are
// ignored, and so is every other kind of message.
func (e *Engine) ApplyAhead(m *Message) {
	if m.Kind != SummaryMessage || m.Position <= max(e.position, e.ahead) {
		return
	}
	e.ahead = m.Position
	e.takeSummary(m)
}

// Ahead returns the position of the last summary that was applied ahead; 0 if none
// ever was.
func (e *Engine) Ahead() uint64 { return e.ahead }

// WaitsFor lists the partitions that the engine waits for: in history time those
// for which the message that Holds was asked about last is held, in live time those
// that have not told in time what they count.
func (e *Engine) WaitsFor() []int {
	var list []int
	for _, ix := range e.indicators {
		parts := e.lacking(ix)
		if slices.Contains(e.heldSums, ix) {
			parts = ix.gathering.waitsFor()
		}
		for _, p := range parts {
			if !slices.Contains(list, p) {
				list = append(list, p)
			}
		}
	}
	slices.Sort(list)
	return list
}

// lacking lists the partitions that have not told what is to be in force for the
// indicator.
func (e *Engine) lacking(ix *indicator) []int {
	k := ix.counting
	if k == nil || !ix.started || e.partition.Of <= 1 || e.history && !e.holding || len(e.heldSums) > 0 {
		return nil
	}
	needed := ix.dayBefore(ix.looked)
	if e.history {
		var from Instant
		if needed, from = e.needed(ix); from != e.heldFrom() || from == Never {
			return nil
		}
	}
	var list []int
	for i := range k.told() {
		switch home := config.PartitionOf(ix.cfg.Name, 0, e.partition.Of); {
		case k.lanes[i].done() >= needed || i == e.partition.Number:
		case i < e.partition.Of:
			list = append(list, i)
		case home == e.partition.Number: // gathered sums wait for others themselves
			list = append(list, ix.gathering.waitsFor()...)
		default:
			list = append(list, home)
		}
	}
	slices.Sort(list)
	return slices.Compact(list)
}
