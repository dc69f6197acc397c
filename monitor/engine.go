// Package monitor watches streams of counts for rates that are no longer what
// they were.
//
// # Model
//
// An Engine is a pure function of one partition's stream: observations, acts,
// settings and ticks go in by Apply; alert records, their steps and the
// after-images of its state come out by Drain. It reads no clock, no bus and
// no disk. Its own clock is the running maximum of the times in the stream.
//
// Observations are summed into slots. When a slot has ended and settled, each
// window that ends with it is tested exactly against the baseline (package
// exact): that is a look. Data that change a slot inside the horizon re-run
// the looks they touch. So at any time the standing of every look inside the
// horizon is what the present data say under the set-up that was in force
// when the look fell due.
//
// # Caveats
//
// An Engine serves one goroutine. A look needs every slot of its window to be
// known on both sides; else it is withheld. Nothing here knows what a count
// means: a signal is a statistical finding.
package monitor

import (
	"cmp"
	"encoding/json"
	"fmt"
	"slices"
	"sync"

	"tailbell/config"
	"tailbell/monitor/allowance"
	"tailbell/monitor/life"
)

// Engine is the state of one partition. Create it with New or Restore.
type Engine struct {
	partition Partition
	setup     *config.Setup
	version   int
	history   bool // the clock moves with the data
	clock     Instant
	nextDue   Instant
	position  uint64

	indicators []*indicator
	series     []*series // by number, the ghost where there is a stub
	living     int       // how many are no stubs
	stubs      stubs
	byName     map[string]*series
	recent     *series // that was asked for last by its name
	ids        ids
	room       room
	alerts     map[string]*alert
	// pending are alerts whose evidence was corrected at the present moment.
	pending []*alert
	wakes   wakes
	// deadlines are when series will be silent.
	deadlines deadlines
	comings   comings
	account   Account
	// facts are the acts on series that hold, and factsJSON is how they are
	// stored; because is why looks are being made again, "" where data changed.
	facts     []fact
	factsJSON json.RawMessage
	because   string

	// What the next Drain hands over.
	drained    uint64
	touched    []*series
	archived   []ArchivedSlot
	refused    []Refusal
	changed    []*alert
	steps      []life.Notice
	settings   []SettingChange
	checkpoint checkpoint
	// archiveFrom is when the archive begins, Beginning while all is kept.
	archiveFrom Instant

	// allowances and solutions remember what was solved: they follow from what
	// is stored.
	allowances allowance.Cache
	solved     map[solvedFor]*solution
	solutions  map[string]*solution
	sharing    sync.Mutex // held while solutions are: series are read side by side

	// gathered is the moment at which sums are being gathered, Never when none
	// are.
	gathered Instant
	// inbounds, deferrals and told are of sums that are gathered from several
	// partitions; waiting is the number of the last summary that waited.
	inbounds  []*inbound
	deferrals []deferral
	told      []outbound
	kept      []*Summary
	released  []uint64
	waiting   uint64
	// countings are what partitions tell each other to count, and countsJSON is how
	// that is stored. Messages of history time are held from a moment on, which is
	// found again when it may have changed; holding says that one is, and heldSums
	// are the indicators for whose gathered sums a set-up waits. Of the message
	// after the position the first part elements have been applied, and of the ones
	// after that the summaries up to ahead.
	countings  []*counting
	countsJSON json.RawMessage
	held       Instant
	heldStale  bool
	holding    bool
	heldSums   []*indicator
	part       int
	ahead      uint64
	// lives says how often a set-up brought an indicator of which partitions tell
	// each other, by its life.
	lives map[string]int

	onLook func(View)
	looks  []look // scratch
	// passing says that nothing stores the engine, see Pass; formerly is what series
	// that have ended were looked at.
	passing  bool
	formerly []Watched
	// known are p-values that were computed, nil if nobody asked for any.
	known *KnownChances
	// long makes it go no quick way: tests hold those against the long ones.
	long bool
}

// Partition says which part of all series an engine holds.
type Partition struct {
	Number   int
	Of       int
	KeyParts int
}

// New returns the engine of a partition at the beginning of its stream: in
// history time, without a set-up.
func New(p Partition) *Engine {
	return &Engine{
		partition: p, history: true, clock: Beginning, nextDue: Never,
		byName: map[string]*series{}, stubs: newStubs(), alerts: map[string]*alert{},
		ids: newIDs(), gathered: Never, archiveFrom: Beginning,
		account: Account{RefusedBy: map[Reason]int64{}},
	}
}

// Apply takes the next message of the stream. Messages at or before the
// position already applied are ignored.
func (e *Engine) Apply(m *Message) {
	if m.Position <= e.position {
		return
	}
	e.position, e.holding, e.heldSums = m.Position, false, nil
	switch {
	case !e.history || m.Kind == Live:
		if e.history {
			e.history = false
			e.rewakeAll() // people can be reminded from now on
		}
		e.advance(m.Stored)
	case m.HasTime && m.Kind != Observations:
		e.advance(m.Time)
	}
	switch m.Kind {
	case Observations:
		for ; e.part < len(m.Items); e.part++ {
			e.element(m, e.part)
		}
		e.part = 0
	case ActMessage:
		e.act(m)
	case SettingMessage:
		e.set(m)
	case Rejected:
		e.account.Rejected++
		e.refuse(m, 0, "", m.Items[0].Reason, m.Items[0].Detail, m.Items[0].Raw)
	case SummaryMessage:
		if m.Position > e.ahead {
			e.takeSummary(m)
		}
	case Tick, Live:
	}
}

// element counts one observation of a message, or its refusal.
func (e *Engine) element(m *Message, index int) {
	it := &m.Items[index]
	e.account.Elements++
	if it.Reason != "" {
		e.account.Refused++
		e.refuse(m, index, it.Observation.Series, it.Reason, it.Detail, it.Raw)
		return
	}
	if e.plainRow(m, &it.Observation) {
		return
	}
	if reason, detail := e.keepTime(m, &it.Observation); reason != "" {
		e.account.Refused++
		e.refuse(m, index, it.Observation.Series, reason, detail, it.Raw)
		return
	}
	if e.usualRow(&it.Observation) {
		return
	}
	if reason, detail := e.observe(&it.Observation); reason != "" {
		e.account.Refused++
		e.refuse(m, index, it.Observation.Series, reason, detail, it.Raw)
	}
}

// keepTime moves the clock of history time to when the observation became
// known. One that no indicator monitors has no say in that, nor one that is
// news of a slot that could not change any more by then: its times must be
// wrong, and would take the clock past everything that is still to come.
func (e *Engine) keepTime(m *Message, o *Observation) (Reason, string) {
	known, reason, detail := e.timeOf(m, o)
	if reason == "" {
		e.advance(known)
	}
	return reason, detail
}

// timeOf is the moment to which the observation moves the clock of history time,
// Beginning if it does not, or why it is refused.
func (e *Engine) timeOf(m *Message, o *Observation) (Instant, Reason, string) {
	if !e.history {
		return Beginning, "", ""
	}
	known := m.timeOf(o)
	ix, _ := e.indicatorOf(o.Series)
	if ix == nil || known <= e.clock {
		return Beginning, "", ""
	}
	if !o.Retracted && (o.ID == "" || !e.ids.has(idKey{siteOf(o.Series), o.ID})) {
		if end := ix.cal.Start(ix.cal.Slot(o.Start) + 1); end < known.Add(-ix.cfg.Horizon) {
			return Beginning, BeyondHorizon, fmt.Sprintf("its slot ended %s, but it became known only at %s, more than the horizon of %s later: correct its times",
				at(end), at(known), config.FormatDuration(ix.cfg.Horizon))
		}
	}
	return known, "", ""
}

// advance moves the clock and makes the looks that fall due on the way.
func (e *Engine) advance(to Instant) {
	if to <= e.clock {
		return
	}
	e.settleAll()
	for {
		e.arrive(min(to, e.nextDue-1), to)
		if e.nextDue > to {
			break
		}
		e.lookNext(to)
	}
	if e.clock == Beginning {
		for _, ix := range e.indicators {
			ix.start(to)
			e.began(ix)
		}
		e.reschedule()
		e.awaken(to)
	}
	e.clock = to
	e.ids.drop(to)
}

// lookNext makes the looks that fall due next, on the way to a moment.
func (e *Engine) lookNext(to Instant) {
	ix := e.dueFirst()
	if e.idle(ix) {
		ix.start(to)
		e.began(ix)
	} else {
		e.lookAll(ix, ix.looked+1)
	}
	e.reschedule()
}

// lookBefore makes the looks that fell due before a moment that the clock has passed
// already: under a set-up with a shorter time to settle they may.
func (e *Engine) lookBefore(moment Instant) {
	e.settleAll()
	for e.nextDue < moment {
		e.lookNext(moment - 1)
	}
}

func (e *Engine) dueFirst() *indicator {
	return slices.MinFunc(e.indicators, func(a, b *indicator) int { return cmp.Compare(a.nextDue, b.nextDue) })
}

func (e *Engine) reschedule() {
	e.nextDue = Never
	for _, ix := range e.indicators {
		e.nextDue = min(e.nextDue, ix.nextDue)
	}
}

// NextDue returns when the next look falls due, and false if none will.
func (e *Engine) NextDue() (Instant, bool) {
	due := Never
	for _, ix := range e.indicators {
		if !e.idle(ix) || ix.gathering != nil && e.partition.Of > 1 {
			due = min(due, ix.nextDue)
		}
	}
	due = min(due, e.nextWake(), e.nextComing(), e.nextDeadline())
	if len(e.pending) > 0 {
		const soon = 1_000_000 // a second, in which more of the same may come
		due = min(due, e.clock+soon)
	}
	return due, due != Never
}

// Clock returns the partition's clock; Beginning before the first message
// that tells a time.
func (e *Engine) Clock() Instant { return e.clock }

// Position returns the position of the last message applied.
func (e *Engine) Position() uint64 { return e.position }

// InHistory reports whether the clock still moves with the data.
func (e *Engine) InHistory() bool { return e.history }

// Setup returns the set-up in force and its version, nil and 0 before the
// first.
func (e *Engine) Setup() (*config.Setup, int) { return e.setup, e.version }

// refuse keeps a refusal for the store.
func (e *Engine) refuse(m *Message, index int, series string, reason Reason, detail string, raw []byte) {
	e.account.RefusedBy[reason]++
	e.refused = append(e.refused, Refusal{
		Position: m.Position, Index: index, At: e.clock, Reason: reason,
		Detail: detail, Series: series, Raw: raw,
	})
}

// touch notes that the series' own state changed.
func (e *Engine) touch(s *series) {
	s.rouse()
	e.list(s)
}

// list notes that the series is to be stored.
func (e *Engine) list(s *series) {
	if !s.touched {
		s.touched = true
		e.touched = append(e.touched, s)
	}
}

func (e *Engine) touchSlot(s *series, slot int64) {
	s.changed(slot)
	if s.restsOn(slot) {
		e.list(s)
	} else {
		e.touch(s)
	}
	if e.passing {
		return
	}
	if n := len(s.dirty); n == 0 || s.dirty[n-1] != slot {
		s.dirty = append(s.dirty, slot)
	}
}

func (e *Engine) touchAlert(a *alert) {
	if !a.dirty {
		a.dirty = true
		e.changed = append(e.changed, a)
	}
}
