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
