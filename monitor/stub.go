package monitor

import (
	"cmp"
	queue "container/heap"
	"encoding/binary"
)

// stub is what is kept of a series that is monitored no longer, under the number
// that it had: for as long as it took to retire, and then until another series needs
// the number; or for good if there were alerts of it, which are numbered on should it
// come back.
type stub struct {
	number    uint32
	name      string // "" once a series of this name is monitored again
	indicator string
	// seen is when it was last heard of, and at when it ended.
	seen, at Instant
	// until is when the last slot ended that an id of it may speak of, and keep
	// until when its name is remembered in any case.
	until, keep Instant
	// unpaired counts the elements in its slots that lacked a side.
	unpaired int64
	opened   [3]int32 // the alerts that there were, by direction
	// dismissed says that its indicator went, and that what ids said of it is
	// forgotten with it.
	dismissed bool
	touched   bool
}

// ghost stands in the list of series where a stub has the number, and forgotten
// where what ids said of it is forgotten.
var (
	ghost     = &series{retired: true}
	forgotten = &series{retired: true}
)

func (x *stub) ghost() *series {
	if x.dismissed {
		return forgotten
	}
	return ghost
}

// spares are the stubs whose numbers may be given away, the next one first.
type spares []*stub

func (x spares) Len() int      { return len(x) }
func (x spares) Swap(i, j int) { x[i], x[j] = x[j], x[i] }

func (x spares) Less(i, j int) bool {
	return cmp.Or(cmp.Compare(x[i].keep, x[j].keep), cmp.Compare(x[i].number, x[j].number)) < 0
}

// Push appends s; it is called by package heap alone.
func (x *spares) Push(s any) {
	if next, ok := s.(*stub); ok {
		*x = append(*x, next)
	}
}

// Pop removes the last one; it is called by package heap alone.
func (x *spares) Pop() any {
	old := *x
	last := old[len(old)-1]
	old[len(old)-1] = nil
	*x = old[:len(old)-1]
	return last
}

// stubs are those of a partition.
type stubs struct {
	byName   map[string]*stub
	byNumber map[uint32]*stub
	spare    spares
	touched  []*stub
}

func newStubs() stubs { return stubs{byName: map[string]*stub{}, byNumber: map[uint32]*stub{}} }

func (x *stub) isSpare() bool { return x.opened == [3]int32{} }

// keep takes a stub in.
func (x *stubs) keep(s *stub) {
	x.byNumber[s.number] = s
	if s.name != "" {
		x.byName[s.name] = s
	}
	if s.isSpare() {
		queue.Push(&x.spare, s)
	}
}

func (x *stubs) touch(s *stub) {
	if !s.touched {
		s.touched = true
		x.touched = append(x.touched, s)
	}
}

// forget lets the name of a stub go, since a series of this name is there again.
func (x *stubs) forget(s *stub) {
	delete(x.byName, s.name)
	spare := s.isSpare()
	s.name, s.opened = "", [3]int32{}
	if !spare {
		queue.Push(&x.spare, s)
	}
	x.touch(s)
}

// end makes a stub of a series. It no longer stands in its indicator's list then,
// or is taken out of it next.
func (e *Engine) end(s *series, at Instant, dismissed bool) {
	ix := s.indicator
	s.rouse()
	x := &stub{number: s.number, name: s.name, indicator: ix.cfg.Name, seen: s.seen, at: at, until: Beginning, keep: at.Add(ix.cfg.Retire), unpaired: s.unpaired, dismissed: dismissed}
	for d := range s.tails {
		x.opened[d] = s.tails[d].opened
	}
	if s.silence != nil {
		x.opened[silence] = s.silence.opened
	}
	if ix.cfg.KeepIDs {
		if ix.started && ix.kept != never {
			x.until = ix.cal.Start(ix.kept)
		}
		if n := len(s.cells); n > 0 {
			x.until = max(x.until, ix.cal.Start(s.cells[n-1].slot+1))
		}
	}
	if e.passing {
		e.formerly = append(e.formerly, s.watchedAs()...)
	}
	delete(e.byName, s.name)
	e.living--
	e.series[s.number] = x.ghost()
	*s = series{number: s.number, name: s.name, indicator: ix, retired: true}
	e.stubs.keep(x)
	e.stubs.touch(x)
}

// number returns the number of a series that begins: one that was given back some
// time ago and that no id can speak of any more, else a new one.
func (e *Engine) number() uint32 {
	if len(e.stubs.spare) == 0 {
		return uint32(len(e.series))
	}
	x := e.stubs.spare[0]
	if e.clock < x.keep || x.until != Beginning && (e.clock == Beginning || e.ids.generationOf(x.until) >= e.ids.generationOf(e.clock.Add(-e.ids.horizon))) {
		return uint32(len(e.series))
	}
	queue.Pop(&e.stubs.spare)
	delete(e.stubs.byNumber, x.number)
	if x.name != "" {
		delete(e.stubs.byName, x.name)
	}
	e.account.Withheld += x.unpaired
	return x.number
}

// comeBack goes on numbering alerts where they ended when a series of this name was
// monitored before: no two have the same number.
func (e *Engine) comeBack(s *series) {
	x := e.stubs.byName[s.name]
	if x == nil {
		return
	}
	for d, n := range x.opened {
		if n > 0 {
			s.tail(direction(d)).opened = n
		}
	}
	e.account.Returned++
	e.stubs.forget(x)
}

func (x *stub) encode(b []byte) []byte {
	b = append(b, encodingVersion, flagNamed|flagRetired)
	b = binary.AppendVarint(appendString(b, x.name), x.unpaired)
	for _, n := range x.opened {
		b = binary.AppendUvarint(b, uint64(n))
	}
	b = appendString(b, x.indicator)
	for _, at := range [...]Instant{x.seen, x.at, x.until, x.keep} {
		b = binary.AppendVarint(b, int64(at))
	}
	return append(b, flag(x.dismissed))
}

// stub reads one. Those that were written before series retired do not tell their
// times: they count as ended by now.
func (r *reader) stub(number uint32, now Instant) *stub {
	x := &stub{number: number, name: r.string(), unpaired: r.int()}
	for d := range x.opened {
		x.opened[d] = int32(r.uint())
	}
	if len(r.b) == 0 {
		x.at, x.until, x.keep, x.dismissed, x.touched = now, now, now, true, true
		return x
	}
	x.indicator = r.string()
	x.seen, x.at, x.until, x.keep = Instant(r.int()), Instant(r.int()), Instant(r.int()), Instant(r.int())
	x.dismissed = r.flag()
	return x
}
