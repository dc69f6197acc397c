package config

import (
	"fmt"
	"math"
	"math/big"
	"slices"
	"strings"
)

// readBaselines reads the baselines of an indicator: the last one serves every
// series that those before it don't.
func (s section) readBaselines(in *Indicator) []Baseline {
	tables := s.tables("baseline", maxBaselines)
	if !s.has("baseline") {
		s.fault("baseline", "is missing: what is the usual rate?", "add a table [indicator.baseline]")
	}
	var all []Baseline
	for i, t := range tables {
		t.strict("[[indicator.baseline]]")
		b := t.readBaseline(in)
		b.Series = t.readServed(in, all, i == len(tables)-1)
		all = append(all, b)
	}
	return all
}

// readServed reads which series of the indicator a baseline serves.
func (s section) readServed(in *Indicator, earlier []Baseline, last bool) Pattern {
	all := NewPattern("**")
	n, given, ok := s.get("series", textKind)
	if !ok {
		return all
	}
	p := all
	if given {
		if p, ok = s.patternOf(n, s.key("series")); !ok {
			return all
		}
	}
	switch {
	case last && p != all:
		s.fault("series", "the last baseline must serve every series that is left", "leave series out here, or add a baseline without it")
	case !last && p == all:
		s.fault("series", "this baseline serves every series, so those after it are never used",
			"say which series it serves, or put it last")
	case p != all && slices.ContainsFunc(earlier, func(b Baseline) bool { return b.Series == p }):
		s.fault("series", fmt.Sprintf("%q has a baseline already, and the first is used", n.text), "keep one")
	case p != all && !slices.ContainsFunc(in.Series, func(q Pattern) bool { _, both := overlap(p, q); return both }):
		s.fault("series", fmt.Sprintf("%q matches no series of this indicator", n.text), "compare it with the indicator's own patterns")
	}
	return p
}

func (s section) readBaseline(in *Indicator) Baseline {
	b := Baseline{Margin: 1, Spread: 1}
	b.Version, _ = s.text("version", "")
	b.Source, _ = s.text("source", "")
	if m, given, ok := s.number("margin"); given && ok {
		if m.Cmp(big.NewRat(1, 1)) < 0 || m.Cmp(big.NewRat(1000, 1)) > 0 {
			s.fault("margin", "is not between 1 and 1000: it is the ratio to the usual rate that is still accepted", "write 1 for none, 1.05 for five per cent")
		} else {
			b.Margin, _ = m.Float64()
		}
	}
	n, given, ok := s.get("kind", textKind)
	switch {
	case !given:
		s.fault("kind", "is missing: how is the usual rate known?", `write kind = "known" with a rate, or kind = "reference" with events and exposure`)
		return b
	case !ok:
		return b
	case n.text == "trailing" || n.text == "peers":
		s.fault("kind", fmt.Sprintf("%q can't be used yet", n.text), `write "known" or "reference"`)
		return b
	}
	k, ok := s.wordOf(n, s.key("kind"), []string{"known", "reference"})
	b.Kind = BaselineKind(k)
	if !ok {
		return b
	}
	switch b.Kind {
	case Known:
		s.notWith("known", "events", "exposure")
		b.Rate = s.readRate(in, b.Margin)
	case Reference:
		s.notWith("reference", "rate")
		b.Events, b.Exposure = s.readReference(in)
	}
	return b
}

// notWith reports keys that mean nothing for a kind of baseline.
func (s section) notWith(kind string, keys ...string) {
	for _, k := range keys {
		if s.has(k) {
			s.fault(k, fmt.Sprintf("means nothing for kind = %q", kind), "leave it out")
		}
	}
}

// readRate returns the usual rate per unit of exposure, or the proportion.
func (s section) readRate(in *Indicator, margin float64) float64 {
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
		} else if f*margin >= 1 {
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
		if one, plural := strings.CutSuffix(in.Unit, "s"); plural && !strings.HasSuffix(one, "s") {
			return one
		}
		return in.Unit
	}
	if in.Per == math.Trunc(in.Per) && in.Per < 1e15 {
		return grouped(int64(in.Per)) + " " + in.Unit
	}
	return fmt.Sprintf("%g %s", in.Per, in.Unit)
}
