package monitor

import (
	"tailbell/config"
)

// usual is what a look is judged by: the baseline that is valid for its
// boundary, resolved for its series.
type usual struct {
	cfg  *config.Indicator
	base *config.Baseline
	// ref is the reference of all kinds but Known.
	ref *reference
	// limit is the p at or under which the look signals, by direction; 0 where
	// no count does.
	limit [2]float64
}

// reference is so many events in so much exposure, from which a usual rate is
// estimated.
type reference struct {
	// from is the first boundary that it serves, and period the number of the
	// refresh period in which it was counted.
	from, period int64
	events       int64
	exposure     Quantity
	// weighted is the exposure with the factors of the strata.
	weighted float64
	// begin and end bound the slots counted; leftOut of them were left out,
	// because they were marked real.
	begin, end int64
	leftOut    int64
	// strata is the exposure by stratum, while it is being counted.
	strata []Quantity
	// of is the digest of how it was counted, see digest.
	of int64
	// peers is how many other series were counted, and between how much more
	// they differ than chance alone would make them: variance over mean.
	peers   int64
	between float64
}

// judgedBy returns what a look of the window at the boundary is judged by, and
// false if there is no baseline for it.
func (ix *indicator) judgedBy(s *series, ep *epoch, window int, boundary int64) (usual, bool) {
	u, ok := ix.usualAt(s, ep, boundary)
	u.limit = s.limitsAt(ep.cfg, window, boundary)
	return u, ok
}

// usualAt returns the baseline of looks at the boundary, without limits, and
// false if there is none for it, or one that is estimated from too few events.
func (ix *indicator) usualAt(s *series, ep *epoch, boundary int64) (usual, bool) {
	u := usual{cfg: ep.cfg, base: ix.baseline(s, ep.cfg, boundary)}
	if u.base == nil {
		return u, false
	}
	switch u.base.Kind {
	case config.Known:
		return u, true
	case config.Reference:
		u.ref = ix.statedBy(u.base)
		return u, true
	case config.Trailing:
		u.ref = s.referenceAt(boundary)
	case config.Peers:
		if r := s.referenceAt(boundary); r != nil && ix.servedBy(s, ep, u.base, r) {
			u.ref = r
		}
	}
	return u, u.ref != nil && u.ref.weighted > 0 && u.ref.events >= u.base.MinEvents
}

// stated is the reference that a baseline states.
type stated struct {
	base *config.Baseline
	ref  *reference
}

// statedBy returns the reference that the baseline states. The one asked for
// last is asked for again by every look that follows.
func (ix *indicator) statedBy(b *config.Baseline) *reference {
	if ix.stated.base != b {
		ix.stated = stated{b, &reference{events: b.Events, weighted: floatOf(b.Exposure)}}
	}
	return ix.stated.ref
}

// baseline returns the baseline that serves the series at the boundary, nil
// for none.
func (ix *indicator) baseline(s *series, cfg *config.Indicator, boundary int64) *config.Baseline {
	if s.baseOf == cfg && s.base != nil {
		return s.base
	}
	b := cfg.BaselineAt(s.name, ix.cal.Start(boundary).Time())
	if dated(cfg) {
		return b // another one may hold at another time
	}
	s.base, s.baseOf = b, cfg
	return b
}

// dated reports whether some baseline of the stanza holds for a time only.
func dated(cfg *config.Indicator) bool {
	for i := range cfg.Baselines {
		if b := &cfg.Baselines[i]; !b.From.IsZero() || !b.To.IsZero() {
			return true
		}
	}
	return false
}

// referenceAt returns the estimate that was in force for the boundary, nil for
// none.
func (s *series) referenceAt(boundary int64) *reference {
	for i := len(s.references) - 1; i >= 0; i-- {
		if s.references[i].from <= boundary {
			return &s.references[i]
		}
	}
	return nil
}
