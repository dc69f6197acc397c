package main

import (
	"fmt"
	"io"
	"math"
	"strconv"
	"strings"

	"tailbell/exact"
)

// tell prints an answer in plain sentences.
func (a exactAnswer) tell(w io.Writer, o exactOptions) error {
	var b strings.Builder
	line := func(format string, args ...any) { b.WriteString(fmt.Sprintf(format, args...) + "\n") }
	in := fmt.Sprintf("%s of exposure", plain(a.size))
	if a.proportion {
		in = plain(a.size) + " trials"
	}
	if a.hasTest {
		line("%s in %s, where %s would be expected %s.", counted(a.events), in, brief(a.expected), a.because(o))
	} else {
		line("%s in %s.", counted(a.events), in)
	}
	level := strconv.FormatFloat(100*(1-o.alpha), 'g', 10, 64) + " %"
	line("")
	line("  %-26s %s%s, %s bounds %s to %s (%s)", a.rateName(), brief(a.rate*o.per), o.perWords(a.proportion), level,
		brief(a.rateLower*o.per), brief(a.rateUpper*o.per), o.boundsName(a.proportion))
	if a.hasTest {
		line("  %-26s %s, %s bounds %s to %s", a.ratioKind, brief(a.ratio), level, brief(a.ratioLower), brief(a.ratioUpper))
		line("  %-26s %s (log10 p %s; %s%s)", "p, "+o.tailWords(), chance(a.p, a.log10P), brief(a.log10P), a.test, midWord(o.mid))
	}
	if s := a.criticalSentence(o); s != "" {
		line("")
		line("%s", s)
	}
	if a.hasTest {
		line("A signal is a statistical finding: it diagnoses nothing, and silence proves no safety. Local policy decides.")
	}
	if _, err := io.WriteString(w, b.String()); err != nil {
		return fmt.Errorf("print the answer: %w", err)
	}
	return nil
}

func (a exactAnswer) because(o exactOptions) string {
	margin := a.marginWords(o)
	if a.hasBaseline {
		return "at the baseline of " + plain(a.baseline) + o.perWords(a.proportion) + margin
	}
	unit := " of exposure"
	if a.proportion {
		unit = " trials"
	}
	return "if things were as in the reference, " + counted(a.refEvents) + " in " + plain(a.reference) + unit + margin
}

// marginWords says what the margin does to what would be expected.
func (a exactAnswer) marginWords(o exactOptions) string {
	if a.margin == 1 {
		return ""
	}
	kind := "times "
	if o.lower && !o.twoSided {
		kind = "divided by "
	}
	if a.hasReference && a.proportion {
		kind = "its odds " + kind
	}
	return " (" + kind + plain(a.margin) + ", the margin)"
}

func (a exactAnswer) rateName() string {
	if a.proportion {
		return "proportion"
	}
	return "rate"
}

func (o exactOptions) perWords(proportion bool) string {
	switch {
	case o.per != 1 && proportion:
		return " per " + plain(o.per) + " trials"
	case o.per != 1:
		return " per " + plain(o.per)
	case proportion:
		return ""
	}
	return " per unit of exposure"
}

func (o exactOptions) boundsName(proportion bool) string {
	name := "Garwood"
	if proportion {
		name = "Clopper and Pearson"
	}
	switch {
	case o.mid:
		return name + ", mid-p"
	case o.twoSided && o.sides == exact.MinLike:
		return "minimum likelihood"
	case o.twoSided && o.sides == exact.Blaker:
		return "Blaker"
	}
	return name
}

func (o exactOptions) tailWords() string {
	switch {
	case o.twoSided:
		return "two-sided (" + o.sides.String() + ")"
	case o.lower:
		return "this few or fewer"
	}
	return "this many or more"
}

func midWord(mid bool) string {
	if mid {
		return ", mid-p"
	}
	return ""
}

func (a exactAnswer) criticalSentence(o exactOptions) string {
	limit := brief(o.limit)
	switch {
	case a.noSignal:
		return "No count could signal at p <= " + limit + " here: too little is expected."
	case !a.hasCritical:
		return ""
	}
	if a.criticalLower {
		return fmt.Sprintf("At p <= %s a look signals at %s or fewer (attained size %s).", limit, counted(a.critical), brief(a.attained))
	}
	return fmt.Sprintf("At p <= %s a look signals from %s on (attained size %s).", limit, counted(a.critical), brief(a.attained))
}

func counted(n int64) string {
	if n == 1 {
		return "1 event"
	}
	return strconv.FormatInt(n, 10) + " events"
}

// plain is a number as a person would type it.
func plain(v float64) string { return strconv.FormatFloat(v, 'f', -1, 64) }

// brief is a number to four digits.
func brief(v float64) string {
	switch {
	case math.IsInf(v, 1):
		return "without limit"
	case math.IsNaN(v):
		return "not known"
	case v != 0 && (math.Abs(v) >= 1e7 || math.Abs(v) < 1e-4):
		return strconv.FormatFloat(v, 'e', 3, 64)
	case math.Abs(v) >= 1e4:
		return strconv.FormatFloat(v, 'f', 0, 64)
	}
	return strconv.FormatFloat(v, 'g', 4, 64)
}

// chance is a p-value; where float64 can't hold it, its power of ten.
func chance(p, log10 float64) string {
	if p < 1e-300 {
		return "10^" + strconv.FormatFloat(log10, 'f', 2, 64)
	}
	return brief(p)
}
