package config

import (
	"fmt"
	"math"
	"math/big"
	"strings"
)

// readBaselines reads the baselines of an indicator: the last one serves every
// series that those before it don't.
func (s section) readBaselines(in *Indicator) []Baseline {
	tables := s.tables("baseline", maxBaselines)
	if !s.has("baseline") {
		s.fault("baseline", "is missing: what is the usual rate?", "add a table [indicator.baseline]")
	}
	var all, sound []Baseline // sound is their validity
	for i, t := range tables {
		t.strict(baselinePlace)
		b := t.readBaseline(in)
		var ok bool
		if b.From, b.To, ok = t.readValidity(in); ok {
			var forSums bool
			if b.Sums, forSums = t.readServedSums(in, i == len(tables)-1); !forSums {
				b.Series = t.readServed(in, &b, sound, i == len(tables)-1)
				sound = append(sound, b)
			}
		}
		all = append(all, b)
	}
	return all
}

func (s section) readBaseline(in *Indicator) Baseline {
	b := Baseline{Margin: 1, Spread: 1}
	b.Version, _ = s.text("version", "")
	b.Source, _ = s.text("source", "")
	s.readMargin(&b)
	s.readSpread(&b)
	b.Strata = s.readStrata(in)
	b.Delay = s.readDelay()
	n, given, ok := s.get("kind", textKind)
	switch {
	case !given:
		s.fault("kind", "is missing: how is the usual rate known?",
			`write kind = "known" with a rate, "reference" with events and exposure, or "trailing" or "peers" with a span`)
		return b
	case !ok:
		return b
	}
	k, ok := s.wordOf(n, s.key("kind"), baselineWords)
	b.Kind = BaselineKind(k)
	if !ok {
		return b
	}
	s.readKind(in, &b)
	s.checkModel(in, &b)
	return b
}

// readKind reads the keys of the baseline's kind, and refuses those of others.
func (s section) readKind(in *Indicator, b *Baseline) {
	counted, history := []string{"events", "exposure"}, []string{"span", "refresh", "min_events"}
	switch b.Kind {
	case Known:
		s.notWith(b.Kind, append(counted, history...)...)
		b.Rate = s.readRate(in, b)
	case Reference:
		s.notWith(b.Kind, append(history, "rate")...)
		b.Events, b.Exposure = s.readReference(in)
	case Trailing, Peers:
		s.notWith(b.Kind, append(counted, "rate")...)
		s.readHistory(in, b)
	}
	if b.Kind != Trailing {
		s.notWith(b.Kind, "gap")
	}
}

func (s section) readMargin(b *Baseline) {
	m, given, ok := s.number("margin")
	switch {
	case !given || !ok:
	case m.Cmp(big.NewRat(1, 1)) < 0 || m.Cmp(big.NewRat(1000, 1)) > 0:
		s.fault("margin", "is not between 1 and 1000: it is the ratio to the usual rate that is still accepted", "write 1 for none, 1.05 for five per cent")
	default:
		b.Margin, _ = m.Float64()
	}
}

func (s section) readSpread(b *Baseline) {
	phi, given, ok := s.number("spread")
	switch {
	case !given || !ok:
	case phi.Cmp(big.NewRat(1, 1)) < 0 || phi.Cmp(big.NewRat(1000, 1)) > 0:
		s.fault("spread", "is not between 1 and 1000: it is the variance of the counts over that of the model", "write 1 for none, 1.6 for 1.6 times as much")
	default:
		b.Spread, _ = phi.Float64()
	}
}

// checkModel refuses what together has no meaning, or no exact test.
func (s section) checkModel(in *Indicator, b *Baseline) {
	if b.Strata != nil && b.Kind == Reference && in.Measure == Proportion {
		s.fault("strata", "a stated reference does not say in which strata its trials were made, and odds can't be averaged over them",
			`use kind = "known", "trailing" or "peers"`)
	}
	s.checkAlike(in, b)
	if b.Delay == nil {
		return
	}
	const mend = "leave it out, and make settle so long that slots are complete when they are looked at"
	switch {
	case in.Measure == Proportion:
		s.fault("delay", "is exact only for a rate (Poisson): an event that is not yet known is taken for a trial without one", mend)
	case b.Spread > 1:
		s.fault("delay", "and spread exclude each other: slots of which different shares are known have no common spread, so their sum has no exact law", mend)
	}
	if in.ArrivalLooks {
		s.fault("delay", "counts from the end of whole slots, and arrival looks cut through them", `leave it out, or write looks = "slot"`)
	}
	if last := b.Delay.last(); last > in.Horizon {
		s.fault("delay", fmt.Sprintf("some events are known only after %s, but what is older than the horizon, %s, is refused",
			FormatDuration(last), FormatDuration(in.Horizon)), "make the horizon longer, or let the share reach 1 within it")
	}
}

// baselineWords are the words for each kind of baseline.
var baselineWords = []string{"known", "reference", "trailing", "peers"}

// String returns the kind as it is written in a set-up.
func (k BaselineKind) String() string {
	switch k {
	case Known, Reference, Trailing, Peers:
		return baselineWords[k]
	}
	return fmt.Sprintf("BaselineKind(%d)", int(k))
}

// notWith reports keys that mean nothing for a kind of baseline.
func (s section) notWith(kind BaselineKind, keys ...string) {
	for _, k := range keys {
		if s.has(k) {
			s.fault(k, fmt.Sprintf("means nothing for kind = %q", kind.String()), "leave it out")
		}
	}
}

// readRate returns the usual rate per unit of exposure, or the proportion.
func (s section) readRate(in *Indicator, b *Baseline) float64 {
	v, given, ok := s.number("rate")
	switch {
	case !given:
		s.fault("rate", "is missing", fmt.Sprintf("write the usual events per %s", perUnit(in)))
		return 0
	case !ok:
		return 0
	case v.Sign() <= 0:
		s.fault("rate", "is not greater than 0", "where nothing ever happens every event is a signal, and no test is needed")
		return 0
	}
	if in.Measure == Proportion {
		f, _ := v.Float64()
		if v.Cmp(big.NewRat(1, 1)) >= 0 {
			s.fault("rate", "the usual proportion must be less than 1", "write e.g. 0.02 for two in a hundred")
		} else if b.Strata.greatest(f)*b.Margin >= 1 {
			s.fault("margin", "the usual proportion times the margin must be less than 1", "make the margin smaller")
		}
		return f
	}
	// The quotient of two decimals, rounded once.
	per, _ := new(big.Rat).SetString(big.NewFloat(in.Per).Text('f', 9))
	f, _ := new(big.Rat).Quo(v, per).Float64()
	if f < 1e-18 || f > 1e18 || math.IsInf(f, 0) {
		s.fault("rate", "is not between 1e-18 and 1e18 for one unit of exposure", "")
		return 0
	}
	return f
}

// readReference returns the events and the exposure that were counted.
func (s section) readReference(in *Indicator) (int64, Decimal) {
	const most = 1 << 53
	events, eventsOK := s.whole("events", 0, 0, most)
	if !s.has("events") {
		s.fault("events", "is missing: how many events were counted?", "")
		eventsOK = false
	}
	exposure, given, ok := s.decimal("exposure")
	if !given {
		s.fault("exposure", "is missing: against how much exposure were they counted?", "")
	}
	if !given || !ok {
		return events, exposure
	}
	switch {
	case exposure.Coef == 0:
		s.fault("exposure", "is not greater than 0", "")
	case in.Measure == Proportion && (exposure.Digits > 0 || exposure.Coef > most):
		s.fault("exposure", "the trials of a proportion are a whole number", "")
	case !eventsOK:
	case in.Measure == Proportion && uint64(events) > exposure.Coef:
		s.fault("events", "are more than the trials they were counted in", "exchange events and exposure?")
	case in.Measure == Proportion && uint64(events) == exposure.Coef && in.Upper:
		s.fault("events", "are as many as the trials: no window can ever lie above that", `watch the lower tail, or take a longer reference`)
	case events == 0 && in.Lower:
		s.fault("events", "are 0: no window can ever lie below that", `watch the upper tail, or take a longer reference`)
	}
	return events, exposure
}

// perUnit writes "1,000 device-days", or "device-day" for one.
func perUnit(in *Indicator) string {
	if in.Per == 1 {
		return oneOf(in.Unit)
	}
	if in.Per == math.Trunc(in.Per) && in.Per < 1e15 {
		return grouped(int64(in.Per)) + " " + in.Unit
	}
	return fmt.Sprintf("%g %s", in.Per, in.Unit)
}

// oneOf is the singular of a unit that only takes an s.
func oneOf(unit string) string {
	if one, plural := strings.CutSuffix(unit, "s"); plural && !strings.HasSuffix(one, "s") {
		return one
	}
	return unit
}
