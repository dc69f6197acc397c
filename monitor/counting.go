package monitor

import (
	"fmt"
	"math/big"
	"slices"

	"tailbell/config"
)

// counting is what the partitions tell each other of an indicator of which series
// may lie in several: how many there are, and what those under a baseline of peers
// counted. Each counts at the first boundary of every day; what all told of a day
// is in force from the first boundary of the next one on. So results are those of
// one partition, and nobody waits for anybody in live time.
type counting struct {
	indicator, life string
	// lanes are what each partition told, its own among them; the last one is of
	// the gathered sums, if there are such.
	lanes []countLane
	sums  bool
	// strict says that history time waits for partitions that have not begun: all
	// began in the same moment of the stream's time.
	strict bool
	// nothing is the latest telling by lane that there is nothing to count, as long
	// as it has not been handed over: it is lengthened.
	nothing [2]*Summary
}

// countLane is what one partition has told, in order.
type countLane struct {
	Begun bool `json:"begun,omitempty"`
	Ended bool `json:"ended,omitempty"`
	// First is the first boundary counted, and Complete the latest of which all
	// parts have come.
	First    int64 `json:"first"`
	Complete int64 `json:"complete"`
	// Through is the boundary of the latest part, Parts how many of it have come,
	// and Open says that more will.
	Through int64 `json:"through"`
	Parts   int   `json:"parts"`
	Open    bool  `json:"open,omitempty"`
	// Counts are those that are not yet in force, or were not yet passed over.
	Counts []*count `json:"counts,omitempty"`
}

// count is what one partition counted at a boundary.
type count struct {
	// After is the boundary counted before. With Nothing there was no series at all
	// at any boundary since.
	After   int64 `json:"after"`
	Through int64 `json:"through"`
	Nothing bool  `json:"nothing,omitempty"`
	// Sums says that gathered sums are counted.
	Sums bool `json:"sums,omitempty"`
	// Series had begun; Limited have limits from an allowance, which are predicted
	// to bring Predicted false alerts a year (in fixed point).
	Series    int64       `json:"series"`
	Limited   int64       `json:"limited,omitempty"`
	Predicted *big.Int    `json:"predicted,omitempty"`
	Pools     []poolCount `json:"pools,omitempty"`
}

// poolCount is what the series under one baseline of peers counted together, over
// the span that ends with a boundary.
type poolCount struct {
	// ID is that of the pool, see poolID, and Period the number of the refresh
	// period for which it is counted; Counted the boundary at which it was, once it
	// is in force.
	ID      int64 `json:"id"`
	Period  int64 `json:"period"`
	Counted int64 `json:"counted,omitempty"`
	// Enough is how many events it must hold.
	Enough  int64 `json:"enough"`
	Units   int64 `json:"units"`
	Events  int64 `json:"events"`
	LeftOut int64 `json:"left_out,omitempty"`
	// Index is the sum of events squared over exposure, in fixed point.
	Index *big.Int `json:"index"`
	// Strata is the exposure by kind of slot, see cellOf.
	Strata []Quantity `json:"strata"`
}

// serves reports whether the pool is good for its period: as long as it holds too few
// events, or a single series, it is counted anew each day.
func (p *poolCount) serves() bool { return p.Units > 1 && p.Events >= p.Enough }

// ofSums is the lane of gathered sums.
func (k *counting) ofSums() *countLane { return &k.lanes[len(k.lanes)-1] }

// told are the lanes that there are.
func (k *counting) told() []countLane {
	if k.sums {
		return k.lanes
	}
	return k.lanes[:len(k.lanes)-1]
}

// countingOf returns what was told of an indicator in a life, made if need be.
func (e *Engine) countingOf(indicator, life string) *counting {
	if k := e.countingNamed(indicator, life); k != nil {
		return k
	}
	k := &counting{indicator: indicator, life: life, lanes: make([]countLane, max(1, e.partition.Of)+1)}
	e.countings = append(e.countings, k)
	return k
}

func (e *Engine) countingNamed(indicator, life string) *counting {
	for _, k := range e.countings {
		if k.indicator == indicator && k.life == life {
			return k
		}
	}
	return nil
}

// done is the boundary through which the partition has told.
func (l *countLane) done() int64 {
	switch {
	case !l.Begun:
		return never
	case l.Ended:
		return maxBoundary
	}
	return l.Complete
}

// complete is the boundary through which all have told, but for one lane.
func (k *counting) complete(but int) int64 {
	done := int64(maxBoundary)
	for i := range k.told() {
		if i != but {
			done = min(done, k.lanes[i].done())
		}
	}
	return done
}

// receive takes what a partition tells, unless it came before. gap says that
// something is missing before it.
func (l *countLane) receive(s *Summary) (repeat, gap bool) {
	switch {
	case s.ends:
		if l.Ended || !l.Begun {
			return true, false
		}
		l.Ended = true
		return false, false
	case l.Ended || l.Begun && (s.through < l.Through || s.through == l.Through && (!l.Open || s.part < l.Parts)):
		return true, false
	case !l.Begun:
		gap = !s.begins || s.part > 0
		l.Begun, l.First, l.Complete = true, s.through, never
	case l.Open:
		gap = s.through != l.Through || s.part != l.Parts
	default:
		gap = s.part > 0 || s.after > l.Through
	}
	n := len(l.Counts) - 1
	if l.Open && s.part > 0 && n >= 0 && l.Counts[n].Through == s.through {
		l.Counts[n].Pools = append(l.Counts[n].Pools, s.count.Pools...)
	} else {
		x := *s.count
		x.After, x.Through, x.Pools = s.after, s.through, slices.Clone(x.Pools)
		l.Counts = append(l.Counts, &x)
	}
	if l.Through, l.Parts, l.Open = s.through, s.part+1, s.more; !s.more {
		l.Complete = s.through
	}
	return false, gap
}

// at returns what the partition told of a boundary. There it had nothing to count
// if zero is true; where both say nothing, it told nothing.
func (l *countLane) at(boundary int64) (x *count, zero bool) {
	if boundary < l.First {
		return nil, true
	}
	for _, x := range l.Counts {
		switch {
		case x.Nothing && x.After < boundary && boundary <= x.Through:
			return nil, true
		case x.Through == boundary:
			return x, false
		}
	}
	return nil, l.Ended && boundary > l.Complete
}

// attend lets the partitions count an indicator, or no longer, as its stanza asks
// for. timely says that they all come to it at the same moment of the stream's time.
func (e *Engine) attend(ix *indicator, setup *config.Setup, timely bool) {
	needs := ix.cfg.CountsAcross(e.partition.KeyParts)
	switch {
	case needs && ix.counting == nil:
		k := e.countingOf(ix.cfg.Name, e.newLife("counts of "+ix.cfg.Name, setup))
		k.sums, k.strict = ix.gathering != nil, timely
		ix.counting, ix.agreed = k, newCounted()
		up := ix.summing()
		if up != nil {
			up.counting, up.agreed = k, newCounted()
		}
		if ix.started {
			e.beginCounts(ix)
		}
		if up != nil && up.started {
			e.beginCounts(up)
		}
	case !needs && ix.counting != nil:
		e.endCounts(ix)
	}
	e.reheld()
}

// summing returns the indicator as it looks at its gathered sums here, nil if it
// does not.
func (ix *indicator) summing() *indicator {
	if ix.gathering == nil {
		return nil
	}
	return ix.gathering.sums
}

// endCounts says that the partition counts no longer, and forgets what was told.
func (e *Engine) endCounts(ix *indicator) {
	k := ix.counting
	if k == nil {
		return
	}
	for _, x := range []*indicator{ix, ix.summing()} {
		if x == nil {
			continue
		}
		l, sums := e.ownLane(x)
		if l.Begun {
			e.tellCount(k, &Summary{ends: true, after: l.Through, through: l.Through, count: &count{Sums: sums}})
		}
		x.counting, x.agreed = nil, counted{}
		for _, s := range x.series {
			if s.own != nil {
				s.own = nil
				e.touch(s)
			}
		}
	}
	e.forgetEnded(k)
	e.countsChanged()
	e.reheld()
}

// forgetEnded forgets what was told of what this partition counts no longer, and all
// of it once nobody does.
func (e *Engine) forgetEnded(k *counting) {
	if own := &k.lanes[e.partition.Number]; own.Begun && !own.Ended {
		return
	}
	over := true
	for i := range k.lanes {
		l := &k.lanes[i]
		l.Counts = nil
		over = over && (l.Ended || !l.Begun && i == len(k.lanes)-1)
	}
	if over || !k.lanes[e.partition.Number].Begun {
		e.countings = slices.DeleteFunc(e.countings, func(other *counting) bool { return other == k })
	}
}

// ownLane is what the indicator itself tells, and whether that is of gathered sums.
func (e *Engine) ownLane(ix *indicator) (l *countLane, sums bool) {
	if ix.of != nil {
		return ix.counting.ofSums(), true
	}
	return &ix.counting.lanes[e.partition.Number], false
}

// tellCount hands what was counted here to all partitions, this one included.
func (e *Engine) tellCount(k *counting, s *Summary) {
	s.Partition, s.Indicator, s.life = e.partition.Number, k.indicator, k.life
	lane := &k.lanes[e.partition.Number]
	if s.count.Sums {
		lane = k.ofSums()
	}
	lane.receive(s)
	e.countsChanged()
	if e.partition.Of <= 1 {
		return
	}
	last := &k.nothing[flag(s.count.Sums)]
	if *last != nil && s.count.Nothing {
		(*last).through = s.through
		return
	}
	if *last = nil; s.count.Nothing && !s.begins {
		*last = s
	}
	for q := range e.partition.Of {
		if q != e.partition.Number {
			e.told = append(e.told, outbound{q, s})
		}
	}
}

func lostCount(s *Summary) string {
	return fmt.Sprintf("what partition %d counted before it never came: of that day all others are in force without it", s.Partition)
}

// takeCount takes what another partition counted, or refuses it.
func (e *Engine) takeCount(m *Message) {
	s := m.Summary
	lane := s.Partition
	if s.count.Sums {
		lane = e.partition.Of
	}
	switch {
	case s.Partition >= e.partition.Of || s.Partition == e.partition.Number:
		e.rejectSummary(m, noPartition(s, e.partition))
		return
	case s.count.Sums && config.PartitionOf(s.Indicator, 0, e.partition.Of) != s.Partition:
		e.rejectSummary(m, "it counts sums that are gathered in another partition")
		return
	}
	k := e.countingNamed(s.Indicator, s.life)
	if k == nil && !s.begins {
		e.account.SummaryRepeats++ // of an indicator that is not counted here any more
		return
	}
	if k == nil {
		k = e.countingOf(s.Indicator, s.life)
	}
	repeat, gap := k.lanes[lane].receive(s)
	switch {
	case repeat:
		e.account.SummaryRepeats++
		return
	case gap:
		e.refuse(m, 0, "", SummaryGap, lostCount(s), nil)
	}
	e.account.Summaries++
	e.countsChanged()
	e.reheld()
	if k.lanes[e.partition.Number].Ended {
		e.forgetEnded(k)
		return
	}
	for _, ix := range e.indicators {
		if ix.counting == k {
			e.inForce(ix)
			if up := ix.summing(); up != nil {
				e.inForce(up)
			}
		}
	}
}
