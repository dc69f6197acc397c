package monitor

import (
	"cmp"
	"math"
	"slices"

	"tailbell/config"
)

// indicator is one stanza of the set-up at work.
type indicator struct {
	index  int
	cfg    *config.Indicator // in force now
	cal    *Calendar
	clock  clockRule // for exposure by the clock
	needs  sides
	series []*series
	// shuffled says that some of them stand before others with smaller numbers.
	shuffled bool
	sums     []*series // those of series that are sums
	// gathering is set where sums may have members in several partitions; of is
	// the indicator that this one looks at such sums for, nil for all others.
	gathering *gathering
	of        *indicator
	// counting is set where partitions tell each other what they count, and agreed
	// is what of that is in force; poolIDs are those of the pools.
	counting *counting
	agreed   counted
	poolIDs  map[poolKey]int64
	// places are the windows that are or were in force, in the order in which
	// the state of every series has them.
	places []config.Window
	// longest is the length of the longest window in slots, and reach how far
	// before a boundary a look reads: a window, and the one looked at before.
	longest, reach int64
	// looked is the latest boundary at which looks were made or skipped;
	// nextDue is when the next one falls due.
	looked  int64
	started bool
	nextDue Instant
	// frozenAt is the boundary at or before which no look can change any
	// more, and floor the slot before which no look reads, as of looked. They
	// never move back, whatever becomes of settle and horizon.
	frozenAt, floor int64
	// kept is the slot before which cells are forgotten: floor, or further
	// back where a baseline is estimated from the past, or a census may last.
	// It never moves back either: what is forgotten stays so.
	kept int64
	// epochs are the versions of the stanza under which looks that can still
	// be re-run fell due, oldest first.
	epochs []epoch
	// since is, of gathered sums, where the version in force begins: if they are
	// behind, others follow.
	since int64
	// digests are those of the baselines that are estimated.
	digests map[*config.Baseline]int64
	// stated is the reference last asked for of those that baselines state.
	stated stated
	// edges are those of known baselines and stated references.
	edges map[edgeKey]*edges
	// days are the calendar days that epochs of limits follow, drawn what was
	// drawn on the reserve in the present one, and total what is predicted.
	days  *Calendar
	drawn drawn
	total total
	// clocked is what the clock lets expect; exposures is scratch.
	clocked   clocked
	exposures []float64
	resters   resters
	// inherits says that a series took the place of others.
	inherits bool
	// chances sum up the p-values of all looks, if they are asked for.
	chances [2]Chances
}

// epoch is one version of an indicator's stanza.
type epoch struct {
	// from is the first boundary whose looks fall due under it.
	from    int64
	cfg     *config.Indicator
	version int
	digest  string
	// windows are those of the stanza, in its order.
	windows []placed
}

func newIndicator(index int, cfg *config.Indicator) *indicator {
	ix := &indicator{index: index, cfg: cfg, cal: NewCalendar(cfg.Every, cfg.Zone), nextDue: Never, frozenAt: math.MinInt64, floor: never, kept: never, digests: map[*config.Baseline]int64{}}
	ix.days = NewCalendar(config.Every{N: 1, Unit: config.Day}, cfg.Zone)
	ix.drawn.epoch = math.MinInt64
	if cfg.Exposure == config.Clock {
		ix.clock = newClockRule(cfg.Clock, cfg.GrainDigits)
	}
	ix.needs = sides{events: cfg.Events == config.Counted, exposure: cfg.Exposure == config.Reported}
	return ix
}

// ordered returns the series in order of their numbers.
func (ix *indicator) ordered() []*series {
	if ix.shuffled {
		slices.SortFunc(ix.series, func(a, b *series) int { return cmp.Compare(a.number, b.number) })
		ix.shuffled = false
	}
	return ix.series
}

// never is a slot before all others.
const never = math.MinInt64

// start sets the schedule when the partition's clock is known: looks that
// would have fallen due earlier count as made.
func (ix *indicator) start(clock Instant) {
	ix.started = true
	looked := ix.cal.Slot(clock.Add(-ix.cfg.Settle))
	for ix.due(looked+1) <= clock {
		looked++
	}
	ix.pass(looked)
}

// pass notes that looks at the boundary are made, or skipped.
func (ix *indicator) pass(boundary int64) {
	ix.looked = boundary
	ix.nextDue = ix.due(boundary + 1)
	ix.frozenAt = max(ix.frozenAt, ix.frozen(ix.due(boundary)))
	ix.forget()
	ix.measure()
	ix.floor = max(ix.floor, ix.frozenAt+1-ix.reach)
	kept := ix.frozenAt + 1 - max(ix.reach, historyOf(ix.cfg))
	if ix.cfg.Exposure == config.Census { // a level of then may still hold there
		kept = ix.cal.Slot(ix.cal.Start(kept+1).Add(-ix.cfg.CensusExpiry) - 1)
	}
	ix.kept = max(ix.kept, kept)
}

// historyOf is how far before a boundary the estimated baselines read.
func historyOf(cfg *config.Indicator) int64 {
	var slots int64
	for i := range cfg.Baselines {
		if b := &cfg.Baselines[i]; b.Kind == config.Trailing || b.Kind == config.Peers {
			slots = max(slots, int64(b.SpanSlots+b.GapSlots))
		}
	}
	return slots
}

// due is when looks at the boundary before the slot fall due, by the stanza
// that is in force for them.
func (ix *indicator) due(boundary int64) Instant {
	settle := ix.cfg.Settle
	if len(ix.epochs) > 0 {
		settle = ix.epochAt(boundary).cfg.Settle
	}
	return ix.cal.Start(boundary).Add(settle)
}

// frozen is the latest boundary before which no slot can change any more: a
// slot that ended exactly at the horizon still can.
func (ix *indicator) frozen(clock Instant) int64 {
	return ix.cal.Slot(clock.Add(-ix.cfg.Horizon) - 1)
}

// epochAt is the version in force when looks at the boundary fell due.
func (ix *indicator) epochAt(boundary int64) *epoch {
	i := len(ix.epochs) - 1
	for i > 0 && ix.epochs[i].from > boundary {
		i--
	}
	return &ix.epochs[i]
}

// forget drops the versions that no look inside the horizon needs.
func (ix *indicator) forget() {
	for len(ix.epochs) > 1 && ix.epochs[1].from <= ix.frozenAt {
		ix.epochs = ix.epochs[1:]
	}
}

// looksAt reports whether the window looks at the boundary. Windows of trials never
// do.
func (ix *indicator) looksAt(w *config.Window, boundary int64) bool {
	return w.Trials == 0 && (w.Step == 1 || floorMod(boundary-ix.cal.phase(), int64(w.Step)) == 0)
}

// latest is the latest boundary, up to looked, at which the window looks.
func (ix *indicator) latest(w *config.Window) int64 {
	return ix.looked - floorMod(ix.looked-ix.cal.phase(), int64(w.Step))
}
