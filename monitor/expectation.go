package monitor

import (
	"math"
	"time"

	"tailbell/config"
	"tailbell/monitor/allowance"
)

// expectation is how much exposure the slots of a series bring, as far as the
// latest known ones tell: none had more than most, and no window fewer a slot
// on average than least.
type expectation struct{ least, most float64 }

// steadily is the relative difference below which slots count as alike: clocks
// round to a grain.
const steadily = 1e-4

// solutionOf returns what the share of false alerts a year comes to for the
// series as it now stands, nil where nothing is known of its exposure, or no
// baseline is in force.
func (e *Engine) solutionOf(s *series, ep *epoch, boundary int64, perYear float64) *solution {
	ix := s.indicator
	u, ok := ix.usualAt(s, ep, boundary)
	if !ok {
		return nil
	}
	x, ok := ix.expect(s, &u, boundary)
	if !ok {
		return nil
	}
	p := ix.planOf(&u, boundary, x, perYear)
	if ofTrials(ep.cfg) && !ix.planTrials(s, &p, boundary) {
		return nil
	}
	if s.sum != nil { // sums are looked at when slots have settled
		for i := range p.Windows {
			p.Windows[i].Arrival = false
		}
	}
	var l *allowance.Limits
	if u.base.Delay == nil || len(p.Known) > 0 {
		var err error
		if l, err = e.allowances.Limits(&p); err != nil {
			l = nil // such as a reference of events only: no sharper limit is known
		}
	}
	if l == nil {
		return e.share(ep.inPlace(plain(&p)))
	}
	key := solvedFor{l, ep.cfg}
	if known := e.solved[key]; known != nil {
		return known
	}
	if e.solved == nil || len(e.solved) >= mostSolutions {
		e.solved = map[solvedFor]*solution{}
	}
	e.solved[key] = e.share(ep.inPlace(solutionFrom(&p, l)))
	return e.solved[key]
}

// solvedFor are limits, and the stanza whose windows they are for.
type solvedFor struct {
	limits *allowance.Limits
	cfg    *config.Indicator
}

// inPlace gives the limits, which are by window in the stanza's order, to the
// places of the windows.
func (ep *epoch) inPlace(x solution) solution {
	last := 0
	for _, p := range ep.windows {
		last = max(last, p.place)
	}
	placed := solution{alpha: make([]float64, 2*last+2), here: x.here}
	if x.arrival != nil {
		placed.arrival = make([]float64, last+1)
		for i, p := range ep.windows {
			placed.arrival[p.place] = x.arrival[i]
		}
	}
	for i, p := range ep.windows {
		placed.alpha[2*p.place], placed.alpha[2*p.place+1] = x.alpha[2*i], x.alpha[2*i+1]
	}
	return placed
}

// solutionFrom takes the limits from a solved plan. Where no count comes near a
// limit within what was planned for, it is capped: were it kept, a little more
// exposure would let counts signal that are not rare at all. A run of looks that
// signal is not longer, on average, than its window, nor is the time for which a
// span that is looked at when events come holds that many.
func solutionFrom(p *allowance.Plan, l *allowance.Limits) solution {
	x := solution{alpha: make([]float64, 2*len(p.Windows)), here: l.PerYear}
	for _, part := range l.Parts {
		slots := float64(p.Windows[part.Window].Slots)
		if n := p.Windows[part.Window].Trials; n > 0 {
			slots = float64(n) / p.Volume
		}
		most := slots * p.PerYear / p.SlotsPerYear
		if !part.Arrival {
			x.alpha[2*part.Window+int(part.Tail)] = min(part.Alpha, most)
			continue
		}
		if x.arrival == nil {
			x.arrival = make([]float64, len(p.Windows))
		}
		x.arrival[part.Window] = min(part.Alpha, most)
	}
	return x
}

// plain are limits that hold whatever the law: a look signals at most so often
// as its limit says, and every signalling look is paid for. How many looks there
// are at arrivals is not bounded: those never signal.
func plain(p *allowance.Plan) solution {
	looks := 0.0
	tails := 0.0
	if p.Upper {
		tails++
	}
	if p.Lower {
		tails++
	}
	for _, w := range p.Windows {
		if !w.Slot {
			continue
		}
		looks += tails * (p.SlotsPerYear/float64(w.Step) + p.Starts)
	}
	x := solution{alpha: make([]float64, 2*len(p.Windows)), here: p.PerYear}
	for i := range p.Windows {
		if !p.Windows[i].Slot {
			continue
		}
		limit := min(p.PerYear/looks, 0.49)
		if p.Upper {
			x.alpha[2*i] = limit
		}
		if p.Lower {
			x.alpha[2*i+1] = limit
		}
	}
	return x
}

// planOf is what the limits of a series follow from.
func (ix *indicator) planOf(u *usual, boundary int64, x expectation, perYear float64) allowance.Plan {
	cfg, b := u.cfg, u.base
	p := allowance.Plan{
		Law: lawOf(u), Upper: cfg.Upper, Lower: cfg.Lower && (u.ref == nil || u.ref.events > 0),
		SlotsPerYear: cfg.Every.PerYear(), PerYear: perYear, Starts: min(1, cfg.Allowance.Every.PerYear()),
		Assurance: cfg.Allowance.Assurance, Cycle: ix.cycle(b, cfg, boundary),
	}
	p.Exposure = x.most
	if x.least < x.most {
		if p.Exposure = (x.least + x.most) / 2; p.Law.Proportion {
			p.Exposure = math.Ceil(p.Exposure)
		}
		p.Vary = max(x.most/p.Exposure-1, 1-x.least/p.Exposure)
	}
	if b.Delay != nil && cfg.Measure == config.Rate && b.Spread <= 1 {
		p.Known = ix.knownAt(b.Delay, boundary)
	}
	for _, w := range cfg.Windows {
		x := allowance.Window{Slots: w.Slots, Step: w.Step, Slot: cfg.SlotLooks, Arrival: cfg.ArrivalLooks, Trials: w.Trials}
		if cfg.Measure == config.Proportion {
			x.Slot, x.Arrival = x.Slot && w.Trials == 0, w.Trials > 0
		}
		p.Windows = append(p.Windows, x)
	}
	return p
}

func lawOf(u *usual) allowance.Law {
	l := allowance.Law{Proportion: u.cfg.Measure == config.Proportion, Rate: u.base.Rate, Margin: u.base.Margin, Spread: u.base.Spread}
	if u.ref != nil {
		l.Rate, l.Estimated, l.Events, l.Exposure = 0, true, u.ref.events, u.ref.weighted
		if l.Proportion {
			l.Exposure = math.Trunc(l.Exposure)
		}
	}
	return l
}

// knownAt is the share of a slot's events that can have been reported when a
// look at the boundary falls due, from the newest slot of its window on.
func (ix *indicator) knownAt(d *config.Delay, boundary int64) []float64 {
	var shares []float64
	due := ix.due(boundary).Time()
	for n := range longestOf(ix.cfg) {
		share := d.At(due.Sub(ix.cal.Start(boundary - n).Time()))
		shares = append(shares, share)
		if share == 1 {
			break
		}
	}
	return shares
}

// cycle are the factors of the strata that come again every week, or of months
// that are slots. Others are slow: they are counted as exposure, and of the odds
// the present one is taken.
func (ix *indicator) cycle(b *config.Baseline, cfg *config.Indicator, boundary int64) []float64 {
	switch {
	case b.Strata == nil:
		return nil
	case !cycles(b.Strata, cfg) && cfg.Measure == config.Proportion:
		return []float64{ix.factor(b.Strata, boundary-1)}
	case !cycles(b.Strata, cfg):
		return nil
	}
	if b.Strata.By == config.ByMonth {
		return b.Strata.Factors
	}
	const week = 7 * 24 * time.Hour
	length := 24 * time.Hour
	if ix.cal.length > 0 {
		length = time.Duration(ix.cal.length) * time.Microsecond
	}
	monday := time.Date(2024, 1, 1, 0, 0, 0, 0, time.UTC)
	var factors []float64
	for t := time.Duration(0); t < week; t += length {
		factors = append(factors, b.Strata.Factors[b.Strata.Index(monday.Add(t))])
	}
	return factors
}

// cycles reports whether the factors come again after a fixed number of slots.
func cycles(strata *config.Strata, cfg *config.Indicator) bool {
	return strata.By != config.ByMonth || cfg.Every.Unit == config.Month
}

// lookback is how many slots before a boundary tell what to expect: those of
// the longest window, and a week at least where slots are shorter than a day; four
// weeks where there are windows of trials.
func (ix *indicator) lookback() int64 {
	longest := longestOf(ix.cfg)
	if ofTrials(ix.cfg) {
		longest = max(longest, ix.cal.fourWeeks())
	}
	if ix.cal.length > 0 {
		return max(longest, 7*day/ix.cal.length)
	}
	return longest
}

// expect returns what the latest known slots of the series tell of its
// exposure, rounded outwards to one of eight to the octave; false if nothing.
func (ix *indicator) expect(s *series, u *usual, boundary int64) (expectation, bool) {
	if s.exposureFrom() != config.Clock {
		return ix.expectFrom(s, u, max(boundary-ix.lookback(), s.birth, ix.kept), boundary)
	}
	if c := &ix.clocked; c.base != u.base || c.boundary != boundary {
		*c = clocked{base: u.base, boundary: boundary} // the same for all series, also for one out of service
		c.expectation, c.ok = ix.expectFrom(&series{indicator: ix}, u, boundary-ix.lookback(), boundary)
	}
	return ix.clocked.expectation, ix.clocked.ok
}

// clocked is what the clock lets expect, as of a boundary.
type clocked struct {
	base     *config.Baseline
	boundary int64
	ok       bool
	expectation
}

func (ix *indicator) expectFrom(s *series, u *usual, from, boundary int64) (expectation, bool) {
	slots := ix.slotExposures(s, u, from, boundary)
	if len(slots) == 0 {
		return expectation{}, false
	}
	x := expectation{least: math.Inf(1)}
	for _, q := range slots {
		x.most = max(x.most, q)
	}
	for i := range u.cfg.Windows {
		if w := &u.cfg.Windows[i]; w.Trials == 0 {
			x.least = min(x.least, leastMean(slots, w.Slots))
		}
	}
	if math.IsInf(x.least, 1) { // windows of trials are planned for by their volume
		x.least = x.most
	}
	if x.most-x.least <= steadily*x.most {
		return expectation{x.most, x.most}, true
	}
	x.most, x.least = outwards(x.most, x.least)
	if u.cfg.Measure == config.Proportion {
		x.most, x.least = math.Ceil(x.most), math.Floor(x.least)
	}
	x.least = max(x.least, x.most/64)
	return x, true
}

// slotExposures lists what the known slots in [from, to) with any exposure have
// of it, oldest first, by the factors of slow strata.
func (ix *indicator) slotExposures(s *series, u *usual, from, to int64) []float64 {
	strata := u.base.Strata
	if strata != nil && (cycles(strata, u.cfg) || u.cfg.Measure == config.Proportion) {
		strata = nil
	}
	list := ix.exposures[:0]
	ix.eachExposure(s, from, to, func(slot int64, q Quantity, _ bool) {
		if !q.IsZero() {
			list = append(list, float64(ix.factor(strata, slot)*q.Float(u.cfg.GrainDigits)))
		}
	})
	ix.exposures = list
	return list
}

// leastMean is the least mean of so many neighbours in the list, or of all of
// them where they are fewer. Sums are taken in order.
func leastMean(list []float64, n int) float64 {
	n = min(n, len(list))
	sum := 0.0
	for _, q := range list[:n] {
		sum += q
	}
	least := sum
	for i := n; i < len(list); i++ {
		sum += list[i] - list[i-n]
		least = min(least, sum)
	}
	return max(least, 0) / float64(n)
}

// outwards rounds the larger number up and the smaller one down to one of eight
// to the octave, with room for the rounding of sums.
func outwards(most, least float64) (up, down float64) {
	const room = 1e-12
	up, _ = eighths(most * (1 - room))
	_, down = eighths(least * (1 + room))
	return up, down
}

// eighth is the eighth root of 2.
var eighth = math.Sqrt(math.Sqrt(math.Sqrt2))

// eighths are the neighbours of a number among eight to the octave.
func eighths(x float64) (up, down float64) {
	fraction, exponent := math.Frexp(x) // in [1/2, 1)
	down, up = 0.5, 0.5
	for step := 1; up < fraction; step++ {
		if down, up = up, up*eighth; step == 8 {
			up = 1 // as it is, not as it comes to by rounding
		}
	}
	if up == fraction {
		down = up
	}
	return math.Ldexp(up, exponent), math.Ldexp(down, exponent)
}
