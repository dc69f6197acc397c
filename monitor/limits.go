package monitor

import (
	"encoding/binary"
	"math"
	"slices"

	"tailbell/config"
	"tailbell/monitor/allowance"
	"tailbell/monitor/life"
)

// limits are the limits on p of one series that follow from an allowance, in
// force for looks from a boundary on.
type limits struct {
	from int64
	// reserved says that they were drawn from the reserve of an allowance for
	// all series: the series was not there when the epoch began.
	reserved bool
	*solution
}

// solution is what an allowance comes to. Series that are alike share one; it
// is never changed.
type solution struct {
	// alpha is the limit on p by place of the window and direction, 0 where nothing
	// signals.
	alpha []float64
	// arrival is that on looks at arrivals, by window; none where there are no
	// such looks.
	arrival []float64
	// here is how many false alerts a year it is predicted to bring.
	here float64
}

// limitsAt returns the limits on p of a look of the window, by direction; 0
// where it never signals.
func (s *series) limitsAt(cfg *config.Indicator, window int, boundary int64) [2]float64 {
	if cfg.Allowance == nil {
		return [2]float64{cfg.PLimit, cfg.PLimit}
	}
	l := s.limitsOf(boundary)
	if l == nil || 2*window >= len(l.alpha) {
		return [2]float64{} // there are none for it yet
	}
	return [2]float64{l.alpha[2*window], l.alpha[2*window+1]}
}

// limitsOf returns the limits in force for the boundary; for one before the
// first, those. It returns nil for a series that has none yet.
func (s *series) limitsOf(boundary int64) *limits {
	for i := len(s.limits) - 1; i >= 0; i-- {
		if i == 0 || s.limits[i].from <= boundary {
			return &s.limits[i]
		}
	}
	return nil
}

// forgetLimits drops the limits that no look inside the horizon needs.
func (s *series) forgetLimits(frozen int64) {
	n := 0
	for n+1 < len(s.limits) && s.limits[n+1].from <= frozen {
		n++
	}
	s.limits = slices.Delete(s.limits, 0, n)
}

// allot sets the limits of the indicator's series anew where an epoch begins
// with the boundary: at the first boundary of a calendar day, and at the first
// under a changed stanza. In between it serves those that have none yet.
func (e *Engine) allot(ix *indicator, ep *epoch, boundary int64) {
	a := ep.cfg.Allowance
	if a == nil {
		return
	}
	begins := ix.epochBegins(ep, boundary)
	share, across := a.PerYear(), a.PerIndicator && e.across(ep.cfg)
	if begins && a.PerIndicator && !across {
		share = allowance.Share(share, a.Reserve, roundUp(ix.born(boundary)))
	}
	allotTo := func(s *series) {
		switch {
		case s.birth >= boundary:
		case begins && across:
			share, counted := ix.shareOf(s, a)
			e.setLimits(s, ep, boundary, share, !counted)
		case begins, !a.PerIndicator && ix.rebased(s, ep, boundary):
			e.setLimits(s, ep, boundary, share, false)
		case len(s.limits) == 0:
			e.draw(s, ep, boundary)
			e.firstLimits(s)
		}
	}
	if !begins && !dated(ep.cfg) { // those that rest have limits already
		e.visits(ix, ix.resters.awake, allotTo)
		return
	}
	for _, s := range ix.ordered() {
		allotTo(s)
	}
}

// drawNow gives a series of which nobody had heard its first limits, if looks
// of it were missed.
func (e *Engine) drawNow(s *series) {
	if ix := s.indicator; len(s.limits) == 0 && ix.started && s.birth < ix.looked {
		e.draw(s, ix.epochAt(ix.looked), ix.looked)
	}
}

// draw gives a series its first limits within an epoch.
func (e *Engine) draw(s *series, ep *epoch, boundary int64) {
	a := ep.cfg.Allowance
	if a == nil || len(s.limits) > 0 {
		return
	}
	if !a.PerIndicator {
		e.setLimits(s, ep, boundary, a.PerYear(), false)
		return
	}
	if e.across(ep.cfg) {
		share, counted := s.indicator.shareOf(s, a)
		e.setLimits(s, ep, boundary, share, !counted)
		return
	}
	kin := s.indicator.kin()
	ix := kin[0]
	start := ix.epochStart(ep, boundary)
	if ix.drawn.epoch != start {
		ix.drawn.epoch, ix.drawn.series = start, 0
		for _, k := range kin {
			for _, other := range k.series {
				if n := len(other.limits); n > 0 && slices.ContainsFunc(other.limits, func(l limits) bool { return l.reserved && l.from >= start }) {
					ix.drawn.series++
				}
			}
		}
	}
	if e.setLimits(s, ep, boundary, allowance.Newborn(a.PerYear(), a.Reserve, ix.drawn.series), true) {
		ix.drawn.series++
	}
}

// across reports whether partitions count for each other under a stanza: it may be
// an older one, under which they no longer do.
func (e *Engine) across(cfg *config.Indicator) bool { return cfg.CountsAcross(e.partition.KeyParts) }

// shareOf is the series' share of an allowance that series in several partitions
// share, and whether it is one of those counted: else it is new, and draws on the
// reserve.
func (ix *indicator) shareOf(s *series, a *config.Allowance) (perYear float64, counted bool) {
	n := roundUp(int(ix.agreed.Series))
	if ix.isCounted(s) {
		return allowance.Share(a.PerYear(), a.Reserve, n), true
	}
	return allowance.Uncounted(a.PerYear(), a.Reserve, n), false
}

// drawn is how many series drew on the reserve since an epoch began.
type drawn struct {
	epoch  int64
	series int
}

// setLimits brings limits into force from the boundary on, unless they are the
// same as before. It reports false where what is to be expected of the series
// is not known: then the old ones stay.
func (e *Engine) setLimits(s *series, ep *epoch, boundary int64, perYear float64, reserved bool) bool {
	next := e.solutionOf(s, ep, boundary, perYear)
	if next == nil {
		return false
	}
	n := len(s.limits)
	switch {
	case n > 0 && s.limits[n-1].solution == next && s.limits[n-1].reserved == reserved:
		return true
	case n > 0 && s.limits[n-1].from == boundary:
		s.limits[n-1] = limits{boundary, reserved, next}
	default:
		s.limits = append(s.limits, limits{boundary, reserved, next})
	}
	for _, k := range s.indicator.kin() {
		k.total = total{}
	}
	e.touch(s)
	return true
}

// epochBegins reports whether limits are set anew at the boundary.
func (ix *indicator) epochBegins(ep *epoch, boundary int64) bool {
	return ep.from == boundary || ix.dayOf(boundary) != ix.dayOf(boundary-1)
}

// epochStart is the boundary at which the epoch of the boundary began.
func (ix *indicator) epochStart(ep *epoch, boundary int64) int64 {
	midnight := ix.days.Start(ix.dayOf(boundary))
	start := ix.cal.Slot(midnight)
	if ix.cal.Start(start) < midnight {
		start++
	}
	return min(max(start, ep.from), boundary)
}

// dayOf is the number of the calendar day on which the boundary lies.
func (ix *indicator) dayOf(boundary int64) int64 { return ix.days.Slot(ix.cal.Start(boundary)) }

// rebased reports whether another baseline judges looks from the boundary on.
func (ix *indicator) rebased(s *series, ep *epoch, boundary int64) bool {
	return len(s.limits) > 0 && ix.baseline(s, ep.cfg, boundary) != ix.baseline(s, ep.cfg, boundary-1)
}

// born counts the series that began before the boundary.
func (ix *indicator) born(boundary int64) int {
	n := 0
	for _, kin := range ix.kin() {
		for _, s := range kin.series {
			if s.birth < boundary {
				n++
			}
		}
	}
	return n
}

// roundUp rounds a number of series up to one of sixteen to the octave, so that
// one more of many does not change the limits of all.
func roundUp(n int) int {
	step := 1
	for n/step >= 32 {
		step *= 2
	}
	return (n + step - 1) / step * step
}

// total is what is predicted for all series of an indicator together, by the
// limits in force for a boundary.
type total struct {
	boundary int64
	series   int64
	all      float64
}

// allowanceOf says in a record what the limits of a look follow from.
func (e *Engine) allowanceOf(s *series, cfg *config.Indicator, boundary int64) *life.Allowance {
	a := cfg.Allowance
	l := s.limitsOf(boundary)
	if a == nil || l == nil {
		return nil
	}
	r := &life.Allowance{Text: a.String(), For: "series", Assurance: a.Assurance, Here: l.here}
	if a.PerIndicator {
		r.For = "indicator"
	}
	if a.PerIndicator && e.across(cfg) {
		in := &s.indicator.agreed
		r.Series, r.All = in.Limited, unfixed(in.Predicted)
		return r
	}
	if e.partition.Of > 1 || s.indicator.of != nil && !a.PerIndicator { // the others are not seen from here
		return r
	}
	t := s.indicator.totalAt(boundary)
	r.Series, r.All = t.series, t.all
	if s.limits[0].from > boundary { // its first ones hold for what came before, too
		r.Series, r.All = t.series+1, t.all+l.here
	}
	return r
}

// totalAt sums, in order of their numbers, what is predicted for the series
// that had limits at the boundary.
func (ix *indicator) totalAt(boundary int64) total {
	if ix.total.series > 0 && ix.total.boundary == boundary {
		return ix.total
	}
	t := total{boundary: boundary}
	for _, k := range ix.kin() {
		for _, s := range k.ordered() {
			if len(s.limits) > 0 && s.limits[0].from <= boundary {
				t.series++
				t.all += s.limitsOf(boundary).here
			}
		}
	}
	ix.total = t
	return t
}

// share interns a solution.
func (e *Engine) share(x solution) *solution {
	key := x.encode(nil)
	for _, a := range x.arrival {
		key = appendFloat(key, a)
	}
	e.sharing.Lock()
	defer e.sharing.Unlock()
	if known := e.solutions[string(key)]; known != nil {
		return known
	}
	if e.solutions == nil || len(e.solutions) >= mostSolutions {
		e.solutions = map[string]*solution{}
	}
	e.solutions[string(key)] = &x
	return &x
}

const mostSolutions = 1 << 17

func (x *solution) encode(b []byte) []byte {
	b = binary.AppendUvarint(b, uint64(len(x.alpha)))
	for _, a := range x.alpha {
		b = appendFloat(b, a)
	}
	return appendFloat(b, x.here)
}

func (s *series) encodeLimits(b []byte) []byte {
	b = binary.AppendUvarint(b, uint64(len(s.limits)))
	for i := range s.limits {
		l := &s.limits[i]
		b = append(binary.AppendVarint(b, l.from), flag(l.reserved))
		b = l.encode(b)
	}
	return b
}

func (r *reader) limits(e *Engine) []limits {
	var list []limits
	for range r.length() {
		l := limits{from: r.int(), reserved: r.flag()}
		x := solution{alpha: make([]float64, r.length())}
		for i := range x.alpha {
			if x.alpha[i] = r.float(); math.IsNaN(x.alpha[i]) {
				r.fail("a limit is no number")
			}
		}
		x.here = r.float()
		l.solution = e.share(x)
		list = append(list, l)
	}
	return list
}
