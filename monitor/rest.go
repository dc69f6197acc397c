package monitor

import (
	"math"
	"math/bits"

	"tailbell/config"
)

// Most of very many series have no event for hours: what their looks come to is
// known beforehand. Such a series rests. Its looks are counted with those of all
// others that rest, window by window, and it is visited again when it is touched
// by anything, or at the boundary at which something of its own changes: a cell
// leaves memory, a window becomes full, or an event leaves a window of which the
// lower tail is watched.

// resters are what an indicator knows of the series that rest, and of the others.
type resters struct {
	// awake are the series to visit at every boundary, by number; visit is the
	// same while they are.
	awake, visit numbers
	// looks counts the windows of those that rest, by place and by what their
	// looks come to.
	looks [][closed + 1]int64
	// counted is the latest boundary whose looks are counted, and kept what is
	// kept as of then.
	counted, kept int64
	// alarms are the series to visit at a boundary.
	alarms map[int64][]uint32
	epochs int
}

// numbers is a set of them.
type numbers []uint64

func (n *numbers) add(number uint32) {
	for int(number/64) >= len(*n) {
		*n = append(*n, 0)
	}
	(*n)[number/64] |= 1 << (number % 64)
}

func (n numbers) drop(number uint32) { n[number/64] &^= 1 << (number % 64) }

// fewCells is how many are summed as fast as sums are kept.
const fewCells = 12

// noAlarm stands for none.
const noAlarm = math.MaxInt64

// rouse lets the series rest no longer: its state becomes what it had been if it
// had been visited all the time.
func (s *series) rouse() {
	if !s.resting {
		return
	}
	s.catchUp()
	s.resting = false
	r := &s.indicator.resters
	for _, p := range s.indicator.now().windows {
		r.looks[p.place][s.windows[p.place].rests]--
	}
	r.awake.add(s.number)
}

// catchUp brings up to date what a series that rests did not keep.
func (s *series) catchUp() {
	if !s.resting {
		return
	}
	ix := s.indicator
	r := &ix.resters
	for _, p := range ix.now().windows {
		ws := &s.windows[p.place]
		if ws.rests != made {
			continue
		}
		ws.made = ix.latestAt(p.Window, r.counted)
		if p.place < len(s.runnings) && s.runnings[p.place].ok {
			s.runnings[p.place].slide(s, ws.made)
		}
	}
	s.trimmed = max(s.trimmed, r.kept)
}

// slide moves the sum on to the boundary.
func (r *running) slide(s *series, to int64) {
	from := r.from + to - r.to
	for _, c := range s.cells.between(r.from, min(from, r.to)) {
		r.count(&c, -1)
	}
	for _, c := range s.cells.between(max(r.to, from), to) {
		r.count(&c, 1)
	}
	r.from, r.to = from, to
}

// latestAt is the latest boundary, up to one, at which the window looks.
func (ix *indicator) latestAt(w *config.Window, boundary int64) int64 {
	return boundary - floorMod(boundary-ix.cal.phase(), int64(w.Step))
}

// rouseAll lets no series of the engine rest: something changes for all.
func (e *Engine) rouseAll() {
	for _, ix := range e.indicators {
		ix.rouseAll()
	}
}

func (ix *indicator) rouseAll() {
	for _, s := range ix.series {
		s.rouse()
	}
}

// beginVisits rouses those of whom something changes at the boundary, and counts
// the looks there of all that go on resting.
func (e *Engine) beginVisits(ix *indicator, ep *epoch, boundary int64) {
	r := &ix.resters
	if r.epochs != len(ix.epochs) { // less of the past may be kept
		r.epochs = len(ix.epochs)
		ix.rouseAll()
	}
	for _, n := range r.alarms[boundary] {
		if s := e.series[n]; s.indicator == ix && s.alarm == boundary {
			s.alarm = noAlarm
			s.rouse()
		}
	}
	delete(r.alarms, boundary)
	for i := range ep.windows {
		p := &ep.windows[i]
		if p.place >= len(r.looks) || !ix.looksAt(p.Window, boundary) {
			continue
		}
		counts := &r.looks[p.place]
		e.account.Looks += counts[made]
		e.account.Filling += counts[filling]
		e.account.WithheldLooks += counts[missing]
	}
	r.counted, r.kept = boundary, ix.kept
	r.visit = append(r.visit[:0], r.awake...)
}

// visits calls f for the series among those, in order of their numbers, that are
// still the indicator's.
func (e *Engine) visits(ix *indicator, those numbers, f func(*series)) {
	for i, word := range those {
		for ; word != 0; word &= word - 1 {
			n := uint32(i*64 + bits.TrailingZeros64(word))
			if s := e.series[n]; s.indicator == ix && !s.retired {
				f(s)
			} else {
				ix.resters.awake.drop(n)
			}
		}
	}
}

// rest lets the series rest from the boundary on, at which it was visited, if what
// its looks come to is known until something of its own changes.
func (e *Engine) rest(s *series, ep *epoch, boundary int64) {
	ix := s.indicator
	if n := len(s.cells); !byClock(ep.cfg) && n > 0 && s.cells[n-1].slot >= boundary-1 {
		return // it reports
	}
	if e.long || e.passing || e.onLook != nil || e.known != nil || ix.cal.even == 0 || ep.cfg != ix.cfg || !s.mayRest(ep.cfg) {
		return
	}
	n, next := len(s.cells), int64(noAlarm)
	if n > 0 {
		next = max(ix.leaves(s.cells[0].slot, boundary), boundary+1)
	}
	seen, _ := s.cells.find(boundary)
	if seen < n { // it enters the looks to come
		next = min(next, s.cells[seen].slot+1)
	}
	var rests [maxPlaces]status
	for i := range ep.windows {
		p := &ep.windows[i]
		st, until := ix.outlook(s, ep, p, boundary)
		if until <= boundary {
			return
		}
		rests[p.place], next = st, min(next, until)
	}
	r := &ix.resters
	for len(r.looks) < len(ix.places) {
		r.looks = append(r.looks, [closed + 1]int64{})
	}
	for i := range ep.windows {
		place := ep.windows[i].place
		s.windows[place].rests = rests[place]
		r.looks[place][rests[place]]++
	}
	s.resting = true
	if n <= fewCells {
		s.runnings = nil
	}
	r.awake.drop(s.number)
	s.wakeAt(next)
}

// wakeAt sees to it that the series is visited at the boundary.
func (s *series) wakeAt(boundary int64) {
	if boundary >= s.alarm {
		return
	}
	r := &s.indicator.resters
	if r.alarms == nil {
		r.alarms = map[int64][]uint32{}
	}
	s.alarm = boundary
	r.alarms[boundary] = append(r.alarms[boundary], s.number)
}

// mayRest reports whether nothing waits for looks of the series, and nothing but
// its cells and the clock has a say in them.
func (s *series) mayRest(cfg *config.Indicator) bool {
	if !cfg.SlotLooks || cfg.ArrivalLooks || cfg.Exposure == config.Census || s.sum != nil || s.dates != nil || s.heir != nil || s.arrivals != nil {
		return false
	}
	for _, t := range [...]*tail{&s.tails[upper], &s.tails[lower], s.silence} {
		if t.waits() || t != nil && len(t.lit)+len(t.past) > 0 {
			return false
		}
	}
	if len(s.references)+len(s.marked) > 0 || s.comparator != nil {
		return false
	}
	if cfg.Allowance != nil {
		return len(s.limits) == 1
	}
	return len(s.limits) == 0
}

// outlook says what the looks of the window after the boundary come to, and the
// boundary up to which that holds, itself not included; a boundary that is past
// if nothing is sure.
func (ix *indicator) outlook(s *series, ep *epoch, p *placed, boundary int64) (status, int64) {
	latest := ix.latestAt(p.Window, boundary)
	length := int64(p.Slots)
	if full := max(s.birth, p.whole) + length; latest+int64(p.Step) < full {
		return filling, full
	}
	ws := &s.windows[p.place]
	needs := s.needs()
	if len(s.cells.between(latest, boundary)) > 0 {
		return made, 0 // no look has seen them yet
	}
	switch {
	case (needs.events || needs.exposure) && ws.withheld == missing:
		return missing, noAlarm
	case !byClock(ep.cfg) || !ws.hasMade || ws.made != latest || ws.withheld != made:
		return made, 0
	}
	if r := s.running(p.place); !r.ok || r.to != latest {
		return made, 0
	}
	return made, ix.clearUntil(s, ep, p, boundary)
}

// clearUntil is the boundary up to which looks of the window, with exposure by
// the clock, surely do not signal, if no event enters.
func (ix *indicator) clearUntil(s *series, ep *epoch, p *placed, boundary int64) int64 {
	cfg, b, ws, r := ep.cfg, s.base, &s.windows[p.place], s.running(p.place)
	if s.baseOf != cfg || b == nil || !hasEdges(b) {
		return 0
	}
	limit := s.limitsAt(cfg, p.place, boundary)
	t := r.tally
	t.exposure = ix.clock.between(ix.cal.Start(r.from), ix.cal.Start(r.to))
	// Windows of equal length differ by a grain: two to either side are enough.
	if t.exposure.Hi != 0 || t.exposure.Lo < 4 || t.exposure.Lo >= 1<<52-4 {
		return 0
	}
	until := int64(noAlarm)
	if cfg.Lower && limit[lower] > 0 {
		more := t
		more.exposure.Lo += 2
		if !ws.edges[lower].clear(b, limit[lower], &more) {
			return 0
		}
		if inside := s.cells.between(r.from, r.to); len(inside) > 0 {
			until = inside[0].slot + int64(p.Slots) + 1
		}
	}
	t.exposure.Lo -= 2
	if cfg.Upper && t.events > 0 && limit[upper] > 0 && !surelyUsual(cfg, b, limit[upper], &t) && !ws.edges[upper].clear(b, limit[upper], &t) {
		return 0
	}
	return max(until, boundary+1)
}
