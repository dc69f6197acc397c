package monitor

import (
	"math"

	"tailbell/config"
)

// quick makes the looks of one series that fall due at the boundary if they are
// the usual ones: each window full and known, one slot on from the look before
// it, and surely not past its edge in any tail that is watched. It reports
// whether it did; if not, nothing happened but that sums were moved on.
func (e *Engine) quick(s *series, ep *epoch, boundary int64, due Instant) bool {
	ix, cfg := s.indicator, ep.cfg
	if e.long || e.onLook != nil || s.dates != nil || cfg != ix.cfg || s.baseOf != cfg || s.base == nil || s.tails[upper].waits() || s.tails[lower].waits() {
		return false
	}
	b := s.base
	if !hasEdges(b) {
		return false
	}
	if byClock(cfg) {
		return e.quickSparse(s, ep, boundary, due)
	}
	if !ix.plain(cfg) {
		return false
	}
	// The cell that enters all windows; those that leave lie as far before it
	// as the windows are long, where no slot lacks a cell.
	in, ok := s.cells.find(boundary - 1)
	if !ok {
		return false
	}
	for i := range ep.windows {
		if p := &ep.windows[i]; p.Step != 1 || !ix.quickLook(s, b, p.place, in, boundary) {
			return false
		}
	}
	if s.sum != nil {
		e.touch(s)
	}
	for i := range ep.windows {
		w := ep.windows[i].place
		ws := &s.windows[w]
		ws.made = boundary
		e.account.Looks++
		if e.passing {
			e.watched(s, w, due)
		}
		if e.known != nil {
			e.quickChance(s, w)
		}
	}
	return true
}

// hasEdges reports whether looks judged by the baseline are comparisons of their
// exposure with an edge that all series share.
func hasEdges(b *config.Baseline) bool {
	return b.Strata == nil && b.Delay == nil && (b.Kind == config.Known || b.Kind == config.Reference && b.Spread <= 1)
}

// plain reports whether windows of the indicator are sums of reported cells of
// one rate.
func (ix *indicator) plain(cfg *config.Indicator) bool {
	return cfg.Exposure == config.Reported && cfg.Events == config.Counted && cfg.Measure == config.Rate
}

// waits reports whether an alert waits for the looks to come.
func (t *tail) waits() bool { return t != nil && (t.current != nil || t.disarmed) }

// quickLook moves the window's sum on, and reports whether its look is made and
// surely does not signal.
func (ix *indicator) quickLook(s *series, b *config.Baseline, w, in int, boundary int64) bool {
	ws := &s.windows[w]
	r := s.running(w)
	length := r.to - r.from
	out := in - int(length)
	if !r.ok || ws.withheld != made || !ws.hasMade {
		return false
	}
	if r.to == boundary-1 {
		if out < 0 || s.cells[out].slot != r.from {
			return false
		}
		r.move(&s.cells[in], &s.cells[out], s.needs())
	}
	t := &r.tally
	if r.to != boundary || t.known != length || t.exposure.Hi != 0 || t.exposure.Lo == 0 || t.exposure.Lo >= 1<<52 {
		return false
	}
	limit := [2]float64{ix.cfg.PLimit, ix.cfg.PLimit}
	if ix.cfg.Allowance != nil {
		limit = s.limitsAt(ix.cfg, w, boundary)
	}
	if ix.cfg.Upper && t.events > 0 && limit[upper] > 0 && !ws.edges[upper].clear(b, limit[upper], t) {
		return false
	}
	return !ix.cfg.Lower || limit[lower] <= 0 || ws.edges[lower].clear(b, limit[lower], t)
}

// move moves the sum on by one slot.
func (r *running) move(in, out *cell, needs sides) {
	t := &r.tally
	if needs.paired(in) {
		t.known++
	}
	if needs.paired(out) {
		t.known--
	}
	t.events += in.events - out.events
	t.late += in.late - out.late
	t.exposure = t.exposure.add(in.exposure).sub(out.exposure)
	r.from, r.to = r.from+1, r.to+1
}

// clear reports whether the window surely does not signal, by an edge that is
// known already.
func (x *edges) clear(b *config.Baseline, limit float64, t *tally) bool {
	if x == nil || x.key.base != b || x.key.limit != limit || t.events >= int64(len(x.sure)) {
		return false
	}
	if x.key.d == upper {
		return t.exposure.Lo > x.sure[t.events]
	}
	return t.exposure.Lo < x.sure[t.events]
}

// setSure notes how much exposure is surely clear of an edge.
func (x *edges) setSure(events int64, edge float64) {
	for int64(len(x.sure)) <= events {
		x.sure = append(x.sure, x.never())
	}
	if math.IsInf(edge, 1) {
		return
	}
	const most = 1 << 52 // up to which grains are exact as floating-point numbers
	if x.key.d == upper {
		x.sure[events] = uint64(min(most, math.Ceil((edge+2*nearEdge*edge)*pow10[x.u.cfg.GrainDigits])+1))
	} else {
		x.sure[events] = uint64(max(0, math.Floor((edge-2*nearEdge*edge)*pow10[x.u.cfg.GrainDigits])-1))
	}
}

// never is a bound that no exposure is clear of.
func (x *edges) never() uint64 {
	if x.key.d == upper {
		return math.MaxUint64
	}
	return 0
}
