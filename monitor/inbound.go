package monitor

import (
	"fmt"
	"slices"

	"tailbell/config"
)

// inbound is what has come from all partitions of one indicator, in one of its
// lives.
type inbound struct {
	indicator, life string
	lanes           []lane // by partition
}

// lane is what has come from one partition, in order.
type lane struct {
	begun, ended bool
	// first is the boundary through which the first summary told, and complete
	// that through which all parts have come.
	first, complete int64
	// through is the boundary of the latest part, parts how many of it have come,
	// and open says that more will.
	through int64
	parts   int
	open    bool
	// waiting are those that wait for other partitions.
	waiting []*Summary
}

// inboundOf returns what came for an indicator in a life, made if need be.
func (e *Engine) inboundOf(indicator, life string) *inbound {
	for _, in := range e.inbounds {
		if in.indicator == indicator && in.life == life {
			return in
		}
	}
	in := &inbound{indicator: indicator, life: life, lanes: make([]lane, e.partition.Of)}
	e.inbounds = append(e.inbounds, in)
	return in
}

// takeSummary takes the summary of another partition, or refuses it.
func (e *Engine) takeSummary(m *Message) {
	s := m.Summary
	switch {
	case s.count != nil:
		e.takeCount(m)
		return
	case s.Partition >= e.partition.Of || s.Partition == e.partition.Number:
		e.rejectSummary(m, noPartition(s, e.partition))
		return
	case !e.gathers(s.Indicator):
		e.rejectSummary(m, fmt.Sprintf("its sums are not gathered in partition %d", e.partition.Number))
		return
	case slices.ContainsFunc(s.rows, func(r summaryRow) bool {
		return config.PartitionOf(r.name, e.partition.KeyParts, e.partition.Of) != s.Partition
	}):
		e.rejectSummary(m, "it tells of series that are not of its partition")
		return
	}
	repeat, gap := e.receive(s)
	switch {
	case repeat:
		e.account.SummaryRepeats++
		return
	case gap:
		e.refuse(m, 0, "", SummaryGap, fmt.Sprintf("what partition %d told before it never came: sums that it is a part of may lack it", s.Partition), nil)
	}
	e.account.Summaries++
	e.gatherAll()
}

func noPartition(s *Summary, p Partition) string {
	return fmt.Sprintf("it comes from partition %d, and this is %d of %d", s.Partition, p.Number, p.Of)
}

func (e *Engine) rejectSummary(m *Message, detail string) {
	e.account.Rejected++
	e.refuse(m, 0, "", BadSummary, detail+": only the daemons of this deployment publish summaries", m.Summary.data)
}

// receive puts a summary where it waits for those of other partitions, unless it
// came before. gap says that one is missing before it.
func (e *Engine) receive(s *Summary) (repeat, gap bool) {
	if !s.begins && !slices.ContainsFunc(e.inbounds, func(in *inbound) bool { return in.indicator == s.Indicator && in.life == s.life }) {
		return true, false // of an indicator that is monitored here no longer
	}
	in := e.inboundOf(s.Indicator, s.life)
	l := &in.lanes[s.Partition]
	switch {
	case s.ends:
		if l.ended || !l.begun {
			return true, false
		}
		l.ended = true
		return false, false
	case l.ended || l.begun && (s.through < l.through || s.through == l.through && (!l.open || s.part < l.parts)):
		return true, false
	case !l.begun:
		gap = !s.begins || s.part > 0
		l.begun, l.first = true, s.through
	case l.open:
		gap = s.through != l.through || s.part != l.parts
	default:
		gap = s.part > 0 || s.after > l.through
	}
	l.through, l.parts, l.open = s.through, s.part+1, s.more
	if !s.more {
		l.complete = s.through
	} else if s.part == 0 {
		l.complete = s.through - 1
	}
	if s.begins && s.part == 0 && !s.more && len(s.rows) == 0 {
		return false, gap
	}
	if len(s.rows) > 0 {
		e.waiting++
		s.number = e.waiting
		l.waiting = append(l.waiting, s)
		e.kept = append(e.kept, s)
	}
	return false, gap
}

// release forgets a summary that was gathered.
func (e *Engine) release(s *Summary) {
	if i := slices.Index(e.kept, s); i >= 0 {
		e.kept = slices.Delete(e.kept, i, i+1)
		return
	}
	e.released = append(e.released, s.number)
}

// gatherAll gathers the sums of all indicators as far as all partitions have told.
func (e *Engine) gatherAll() {
	for _, ix := range e.indicators {
		if g := ix.gathering; g != nil && g.inbound != nil {
			e.gatherReady(g)
		}
	}
}

// gatherReady gathers the sums as far as all partitions have told.
func (e *Engine) gatherReady(g *gathering) {
	for {
		boundary, ok := g.nextReady()
		e.keepUp(g.sums) // boundaries may have been skipped
		if g.sums.started {
			e.beginCounts(g.sums)
		}
		if !ok {
			return
		}
		var rows []summaryRow
		for p := range g.inbound.lanes {
			l := &g.inbound.lanes[p]
			for len(l.waiting) > 0 && l.waiting[0].through <= boundary {
				rows = append(rows, l.waiting[0].rows...)
				e.release(l.waiting[0])
				l.waiting = l.waiting[1:]
			}
		}
		sortRows(rows)
		e.gather(g, boundary, e.mirrorAll(g, rows))
		e.lookGathered(g.sums, boundary)
		e.keepUp(g.sums)
		e.trimMirrors(g)
		e.catchUp(g)
	}
}

// nextReady returns the next boundary that all partitions have told of, and false
// if there is none. Where no sum is known yet, boundaries are skipped at which
// nothing is told.
func (g *gathering) nextReady() (int64, bool) {
	up := g.sums
	ready, first, next := int64(maxBoundary), int64(maxBoundary), int64(maxBoundary)
	for p := range g.inbound.lanes {
		l := &g.inbound.lanes[p]
		if !l.begun {
			return 0, false
		}
		if len(l.waiting) > 0 {
			next = min(next, l.waiting[0].through)
		}
		first = min(first, l.first)
		if !l.ended {
			ready = min(ready, l.complete)
		}
	}
	if ready == maxBoundary {
		return 0, false
	}
	if !up.started {
		up.started = true
		up.pass(min(first, next-1))
	}
	if skip := min(ready, next-1); len(up.series) == 0 && skip > up.looked {
		up.pass(skip)
	}
	return up.looked + 1, up.looked < ready
}

// scatter ends the gathering of an indicator that is monitored no longer.
func (e *Engine) scatter(ix *indicator) {
	g := ix.gathering
	if g == nil {
		return
	}
	if g.sums != nil {
		e.dismissSeries(g.sums)
	}
	for _, s := range e.series {
		if s.mirror && g.mirrors[s.name] == s {
			*s = series{number: s.number, mirror: true, retired: true, touched: s.touched}
			e.touch(s)
		}
	}
	if e.partition.Of > 1 && g.begun {
		e.tellOut(&Summary{Partition: e.partition.Number, Indicator: ix.cfg.Name, life: g.life, ends: true, after: ix.looked, through: ix.looked})
	}
	if g.inbound != nil {
		for p := range g.inbound.lanes {
			for _, s := range g.inbound.lanes[p].waiting {
				e.release(s)
			}
		}
		e.inbounds = slices.DeleteFunc(e.inbounds, func(in *inbound) bool { return in == g.inbound })
	}
	e.deferrals = slices.DeleteFunc(e.deferrals, func(d deferral) bool { return d.Indicator == ix.cfg.Name })
}

func (e *Engine) indicatorNamed(name []byte) *indicator {
	for _, ix := range e.indicators {
		if ix.cfg.Name == string(name) {
			return ix
		}
	}
	return nil
}

// relinkAllGathered links gathered sums and their members after they were
// restored.
func (e *Engine) relinkAllGathered() {
	for _, ix := range e.indicators {
		g := ix.gathering
		if g == nil {
			continue
		}
		for _, s := range ix.series {
			if s.news == nil {
				continue
			}
			if s.refreshNews(); s.news.any() {
				g.list(s)
			}
		}
		if g.sums == nil {
			continue
		}
		members := ix.series
		if e.partition.Of > 1 {
			members = nil
			for _, s := range e.series {
				if s.mirror && g.mirrors[s.name] == s {
					members = append(members, s)
				}
			}
		}
		e.relinkGathered(g, members)
	}
}

// waitsFor lists the partitions that a boundary waits for that has fallen due.
func (g *gathering) waitsFor() []int {
	var list []int
	for p := range g.inbound.lanes {
		if l := &g.inbound.lanes[p]; !l.begun || !l.ended && l.complete <= g.sums.looked {
			list = append(list, p)
		}
	}
	return list
}
