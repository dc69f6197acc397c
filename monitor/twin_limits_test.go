package monitor

import (
	"math"
	"time"

	"tailbell/config"
	"tailbell/monitor/allowance"
)

// twinLimits are the limits of a series from a boundary on, by window and
// direction.
type twinLimits struct {
	from  int64
	alpha map[int][2]float64
}

// twinDraw says that a series got its first limits within an epoch.
type twinDraw struct {
	day time.Time
	cfg *config.Indicator
}

// day is the calendar date on which a boundary lies.
func (ix *twinIndicator) day(boundary int64) time.Time {
	y, m, d := ix.slots.start(boundary).Time().In(ix.slots.zone).Date()
	return time.Date(y, m, d, 0, 0, 0, 0, time.UTC)
}

// allot sets limits anew on a new day and under a new stanza.
func (w *twin) allot(ix *twinIndicator) {
	b := ix.looked
	cfg := ix.at(b)
	if cfg.Allowance == nil {
		return
	}
	begins := !ix.day(b).Equal(ix.day(b-1)) || cfg != ix.at(b-1)
	for _, ep := range ix.epochs {
		begins = begins || ep.from == b
	}
	there := 0
	for _, s := range ix.series {
		if s.birth < b {
			there++
		}
	}
	for there >= 32 { // the streams never get so far
		panic("the twin does not round numbers of series")
	}
	for _, s := range ix.series {
		switch {
		case s.birth >= b:
		case begins && cfg.Allowance.PerIndicator:
			w.limit(s, cfg, b, cfg.Allowance.PerYear()*(1-cfg.Allowance.Reserve)/float64(there))
		case begins:
			w.limit(s, cfg, b, cfg.Allowance.PerYear())
		default:
			w.draw(s)
		}
	}
}

// draw gives a series its first limits, within an epoch.
func (w *twin) draw(s *twinSeries) {
	ix := s.ix
	if !w.started || len(s.limits) > 0 || s.birth >= ix.looked {
		return
	}
	cfg := ix.at(ix.looked)
	if cfg.Allowance == nil {
		return
	}
	share := cfg.Allowance.PerYear()
	if cfg.Allowance.PerIndicator {
		share *= cfg.Allowance.Reserve
		for _, d := range append(ix.drawn, twinDraw{}) {
			if d.cfg == nil || d.cfg == cfg && d.day.Equal(ix.day(ix.looked)) {
				share /= 2
			}
		}
	}
	if w.limit(s, cfg, ix.looked, share) {
		ix.drawn = append(ix.drawn, twinDraw{ix.day(ix.looked), cfg})
	}
}

// limitAt is the limit on p for a look.
func (s *twinSeries) limitAt(cfg *config.Indicator, boundary int64, window int, d direction) float64 {
	if cfg.Allowance == nil {
		return cfg.PLimit
	}
	if len(s.limits) == 0 {
		return 0
	}
	l := s.limits[0]
	for _, other := range s.limits {
		if other.from <= boundary {
			l = other
		}
	}
	return l.alpha[window][d]
}

// limit brings limits into force, if anything is known of the exposure.
func (w *twin) limit(s *twinSeries, cfg *config.Indicator, boundary int64, perYear float64) bool {
	slots := s.exposures(cfg, boundary)
	if len(slots) == 0 {
		return false
	}
	b := cfg.BaselineFor(s.name)
	p := allowance.Plan{
		Upper: cfg.Upper, Lower: cfg.Lower, PerYear: perYear, Starts: min(1, cfg.Allowance.PerYear()/cfg.Allowance.Alerts),
		SlotsPerYear: cfg.Every.PerYear(), Assurance: cfg.Allowance.Assurance,
		Law: allowance.Law{Proportion: cfg.Measure == config.Proportion, Rate: b.Rate, Margin: b.Margin, Spread: 1},
	}
	if b.Kind == config.Reference {
		p.Law.Rate, p.Law.Estimated, p.Law.Events, p.Law.Exposure = 0, true, b.Events, floatOf(b.Exposure)
	}
	most, least := 0.0, math.Inf(1)
	for _, q := range slots {
		most = max(most, q)
	}
	for _, window := range cfg.Windows {
		p.Windows = append(p.Windows, allowance.Window{Slots: window.Slots, Step: window.Step, Slot: true})
		n := min(window.Slots, len(slots))
		for i := n; i <= len(slots); i++ {
			sum := 0.0
			for _, q := range slots[i-n : i] {
				sum += q
			}
			least = min(least, sum/float64(n))
		}
	}
	p.Exposure = most
	if most-least > most/10_000 {
		up, down := outwards(most, least) // to the bit: TestOutwards holds it against powers of 2
		if p.Law.Proportion {
			up, down = math.Ceil(up), math.Floor(down)
		}
		down = max(down, up/64)
		if p.Exposure = (up + down) / 2; p.Law.Proportion {
			p.Exposure = math.Ceil(p.Exposure)
		}
		p.Vary = max(up/p.Exposure-1, 1-down/p.Exposure)
	}
	l, err := w.allowances.Limits(&p)
	if err != nil {
		panic(err)
	}
	x := twinLimits{boundary, map[int][2]float64{}}
	for _, part := range l.Parts {
		both := x.alpha[part.Window]
		both[part.Tail] = min(part.Alpha, perYear*float64(p.Windows[part.Window].Slots)/p.SlotsPerYear)
		x.alpha[part.Window] = both
	}
	s.limits = append(s.limits, x)
	return true
}

// exposures are those of the latest known slots.
func (s *twinSeries) exposures(cfg *config.Indicator, boundary int64) []float64 {
	ix, back, reach := s.ix, int64(0), int64(0)
	for _, window := range cfg.Windows {
		back, reach = max(back, int64(window.Slots)), max(reach, int64(window.Slots+window.Step))
	}
	if length := ix.slots.uniform(); length > 0 {
		back = max(back, int64(7*24*time.Hour/length))
	}
	kept := ix.looked
	for !ix.frozen(kept) {
		kept--
	}
	var list []float64
	units := math.Pow(10, float64(cfg.GrainDigits))
	for slot := boundary - back; slot < boundary; slot++ {
		switch x := s.sums[slot]; {
		case cfg.Exposure == config.Clock:
			if q := twinByClock(cfg, ix.slots.start(slot), ix.slots.start(slot+1)); q > 0 {
				list = append(list, float64(q)/units)
			}
		case slot >= s.birth && slot >= kept+1-reach && x != nil && x.exposure > 0:
			list = append(list, float64(x.exposure)/units)
		}
	}
	return list
}
