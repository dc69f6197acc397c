package config

import (
	"fmt"
	"slices"
	"strings"
	"time"
)

// Expectation says how long series may be silent.
type Expectation struct {
	// Series is a pattern over the series that are known; one without a * is the
	// name of a series that must report even if nobody ever heard of it.
	Series Pattern
	Within time.Duration
}

// maxExpectations bounds the list of an indicator.
const maxExpectations = 1000

// expectPlace is the table of one of them.
const expectPlace = "[[indicator.expect]]"

// Exact reports whether the pattern is the name of one series.
func (p Pattern) Exact() bool { return !strings.Contains(p.text, "*") }

// SilentFor returns how long the series may be silent, 0 for as long as it
// likes. The first expectation that matches it counts.
func (in *Indicator) SilentFor(series string) time.Duration {
	for i := range in.Expect {
		if e := &in.Expect[i]; e.Series.Match(series) {
			return e.Within
		}
	}
	return 0
}

// Names reports whether the series is named in full among those that must report.
func (in *Indicator) Names(series string) bool {
	return slices.ContainsFunc(in.Expect, func(e Expectation) bool { return e.Series.Exact() && e.Series.String() == series })
}

// readExpect reads how long series may be silent: one time for all of them, or a
// list.
func (s section) readExpect(in *Indicator) {
	n := s.node.fields["expect"]
	switch {
	case n == nil:
		return
	case n.kind != listKind && n.kind != tableKind:
		if within, ok := s.duration("expect", 0, time.Second, maxTime); ok {
			in.Expect = []Expectation{{NewPattern("**"), within}}
		}
		return
	}
	seen := map[string]bool{}
	for _, t := range s.tables("expect", maxExpectations) {
		t.strict(expectPlace)
		var e Expectation
		var ok bool
		if !t.has("series") {
			t.fault("series", "is missing: which series must report?", `write e.g. series = "quillmere-east/ward-3/line-infection", or a pattern`)
			continue
		}
		if e.Series, ok = t.patternOf(t.node.fields["series"], t.key("series")); !ok {
			continue
		}
		text := e.Series.String()
		switch {
		case seen[text]:
			t.fault("series", fmt.Sprintf("%q stands twice", text), "keep one: the first that matches counts")
		case e.Series.Exact() && !in.Matches(text):
			t.fault("series", fmt.Sprintf("%q is no series of this indicator: none of its patterns matches it", text), "correct the name, or give the indicator a pattern for it")
		}
		seen[text] = true
		if !t.has("within") {
			t.fault("within", "is missing: how long may it be silent?", `write e.g. within = "36h"`)
			continue
		}
		if e.Within, ok = t.duration("within", 0, time.Second, maxTime); ok {
			in.Expect = append(in.Expect, e)
		}
	}
}

// shortestSilence is the shortest time in the list, 0 for none.
func (in *Indicator) shortestSilence() time.Duration {
	var shortest time.Duration
	for i := range in.Expect {
		if w := in.Expect[i].Within; shortest == 0 || w < shortest {
			shortest = w
		}
	}
	return shortest
}

// expectText writes the list for people.
func expectText(in *Indicator) string {
	var parts []string
	for i := range in.Expect {
		e := &in.Expect[i]
		if text := FormatDuration(e.Within); e.Series.String() == "**" {
			parts = append(parts, text)
		} else {
			parts = append(parts, e.Series.String()+" within "+text)
		}
	}
	return strings.Join(parts, ", ")
}

// expect says of which series people are told that they are silent.
func (p *prose) expect(in *Indicator) {
	const most = 8
	for i := range in.Expect {
		e := &in.Expect[i]
		which := "A series that matches " + e.Series.String()
		switch {
		case i == most && len(in.Expect) > most+1:
			p.line("  And so for %d further names and patterns.", len(in.Expect)-most)
			return
		case e.Series.String() == "**":
			which = "A series"
			if i > 0 {
				which = "Any other series"
			}
		case e.Series.Exact():
			which = e.Series.String() + ", even if it was never heard of,"
		}
		p.line("  %s that is silent for %s is told to people as silent.", which, elapsed(e.Within))
	}
}
