package monitor

import (
	"math/big"
	"slices"
)

// counted is what is in force of what all partitions counted.
type counted struct {
	// Through is the boundary at which it was counted, never for none.
	Through   int64                `json:"through"`
	Series    int64                `json:"series"`
	Limited   int64                `json:"limited,omitempty"`
	Predicted *big.Int             `json:"predicted,omitempty"`
	Pools     map[int64]*poolCount `json:"pools,omitempty"`
}

func newCounted() counted { return counted{Through: never, Pools: map[int64]*poolCount{}} }

// dayBegins is the first boundary of the calendar day on which the boundary lies.
func (ix *indicator) dayBegins(boundary int64) int64 {
	midnight := ix.days.Start(ix.dayOf(boundary))
	first := ix.cal.Slot(midnight)
	if ix.cal.Start(first) < midnight {
		first++
	}
	first = min(first, boundary)
	for ix.cal.Start(first-1) == ix.cal.Start(first) { // a day that the zone skipped
		first--
	}
	return first
}

// dayBefore is the first boundary of the day before, of those that have any.
func (ix *indicator) dayBefore(boundary int64) int64 {
	return ix.dayBegins(ix.dayBegins(boundary) - 1)
}

// dayAfter is the first boundary of the next day that has any.
func (ix *indicator) dayAfter(boundary int64) int64 {
	today := ix.dayOf(boundary)
	next := max(boundary+1, ix.cal.Slot(ix.days.Start(today+1)))
	for ix.dayOf(next) == today {
		next++
	}
	return next
}

// inForce brings into force what all have told of the day before the one that
// began with, or before, the boundary looked at last.
func (e *Engine) inForce(ix *indicator) {
	if ix.started {
		e.inForceAt(ix, ix.looked)
	}
}

// inForceAt does so for a boundary that is being looked at.
func (e *Engine) inForceAt(ix *indicator, boundary int64) {
	k := ix.counting
	until := min(ix.dayBefore(boundary), k.complete(-1))
	for {
		next := k.after(ix.agreed.Through, until)
		if next > until {
			break
		}
		k.bring(&ix.agreed, next)
		e.countsChanged()
	}
	k.passOver(e)
}

// after is the first boundary after one at which anything was counted. Nothing is
// counted up to another one as well.
func (k *counting) after(boundary, until int64) int64 {
	next := int64(maxBoundary)
	for i := range k.told() {
		for _, x := range k.lanes[i].Counts {
			through := x.Through
			if x.Nothing && x.After < until {
				through = min(through, until)
			}
			if through > boundary {
				next = min(next, through)
				break
			}
		}
	}
	return next
}

// bring brings into force what was counted at a boundary: the numbers, and the
// pools that all have told and that are for another period than those in force.
func (k *counting) bring(in *counted, boundary int64) {
	all := counted{Predicted: new(big.Int)}
	pools := map[int64]*poolCount{}
	tellers, lost := map[int64]int{}, false
	zeros := 0
	for i := range k.told() {
		x, zero := k.lanes[i].at(boundary)
		if zero || x != nil && x.Sums {
			zeros++
		}
		if lost = lost || x == nil && !zero; x == nil {
			continue
		}
		all.Series += x.Series
		all.Limited += x.Limited
		if x.Predicted != nil {
			all.Predicted.Add(all.Predicted, x.Predicted)
		}
		for n := range x.Pools {
			tellers[x.Pools[n].ID]++
			pools[x.Pools[n].ID] = pools[x.Pools[n].ID].with(&x.Pools[n])
		}
	}
	if in.Through = boundary; !lost {
		in.Series, in.Limited, in.Predicted = all.Series, all.Limited, all.Predicted
	}
	for id, p := range pools {
		old := in.Pools[id]
		if tellers[id]+zeros < len(k.told()) || p == nil || p.Units == 0 || old != nil && old.Period == p.Period && old.serves() {
			continue
		}
		p.Counted = boundary
		in.Pools[id] = p
	}
}

// passOver forgets what has come into force for all that it is for.
func (k *counting) passOver(e *Engine) {
	through := int64(maxBoundary)
	for _, ix := range e.indicators {
		if ix.counting != k {
			continue
		}
		through = min(through, ix.agreed.Through)
		if up := ix.summing(); up != nil {
			through = min(through, up.agreed.Through)
		}
	}
	if through == maxBoundary {
		return
	}
	for i := range k.lanes {
		l := &k.lanes[i]
		l.Counts = slices.DeleteFunc(l.Counts, func(x *count) bool { return x.Through <= through })
	}
}

// forgetPools drops the pools that no stanza of the indicator asks for any more.
func (ix *indicator) forgetPools(wanted map[int64]bool) {
	for id := range ix.agreed.Pools {
		if !wanted[id] {
			delete(ix.agreed.Pools, id)
		}
	}
}
