package config

import (
	"fmt"
	"slices"
	"strconv"
)

// Told says of which steps of which alerts an outlet is told. All that is said
// must hold.
type Told struct {
	// Indicators by name, and Series by pattern; none for all.
	Indicators []string
	Series     []Pattern
	// Upper and Lower are the tails.
	Upper, Lower bool
	// PAtMost is what the p of an alert's strongest look must not exceed; 0 for
	// any. From the step on at which it does not, the alert is told.
	PAtMost float64
	// Steps are the kinds of step; none for all.
	Steps []string
	// History tells of steps taken in history time, too.
	History bool
}

// OutletSteps are the kinds of step of which an outlet may be told.
var OutletSteps = []string{
	"opened", "worsened", "evidence corrected", "reminder", "acknowledged", "shelved", "unshelved",
	"returned", "withdrawn", "closed", "note", "marked",
}

func (s section) readTold(kind OutletKind, indicators []Indicator) Told {
	t := Told{Upper: true, Lower: true, History: kind == Webhook}
	t.Indicators = s.readIndicatorNames(indicators)
	if s.has("series") {
		t.Series = s.readPatterns()
	}
	if s.has("tails") {
		t.Upper, t.Lower = s.readTails()
	}
	if p, given, ok := s.number("p_at_most"); given && ok {
		t.PAtMost, _ = p.Float64()
		if t.PAtMost < 1e-300 || t.PAtMost >= 0.5 {
			s.fault("p_at_most", strconv.FormatFloat(t.PAtMost, 'g', -1, 64)+" is not greater than 0 and less than 0.5", "write e.g. 1e-5")
		}
	}
	items, _ := s.list("steps", len(OutletSteps))
	for i, n := range items {
		key := s.item("steps", i)
		if n.kind != textKind {
			s.wrongKind(n, key, textKind)
			continue
		}
		if _, ok := s.wordOf(n, key, OutletSteps); ok && slices.Contains(t.Steps, n.text) {
			s.add(n, key, fmt.Sprintf("%q stands twice", n.text), "keep one")
		}
		t.Steps = append(t.Steps, n.text)
	}
	if n, given, ok := s.get("history", truthKind); given && ok {
		t.History = n.text == "true"
	}
	return t
}

// readIndicatorNames returns names of indicators that there are.
func (s section) readIndicatorNames(indicators []Indicator) []string {
	items, _ := s.list("indicators", maxIndicators)
	names := s.texts("indicators", items)
	for i, n := range items {
		known := slices.ContainsFunc(indicators, func(in Indicator) bool { return in.Name == n.text })
		if n.kind == textKind && n.text != "" && !known {
			s.add(n, s.item("indicators", i), fmt.Sprintf("%q is the name of no indicator", n.text), "name indicators of this set-up")
		}
	}
	return names
}
