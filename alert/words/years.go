package words

import (
	"fmt"
	"math"

	"tailbell/monitor/life"
)

// years says what a ring under an allowance means: how often one comes by
// chance on this series, and on all of them together. It says nothing where
// the set-up states the p of a signal itself.
func years(e *life.Evidence) string {
	a := e.Allowance
	if a == nil || !(a.Here > 0) {
		return ""
	}
	text := "Even while the usual " + measure(e) + " holds, a ring here comes by chance at most about " + often(a.Here)
	if a.Series > 1 {
		text += fmt.Sprintf("; over all %s series of the indicator at most about %s", whole(a.Series), often(a.All))
	}
	return text + " (" + kept(e, a) + ")"
}

// often writes a number of times a year: "once in 9 years", "1.6 times a year".
func often(perYear float64) string {
	switch span := 1 / perYear; {
	case perYear >= 1.05:
		return number(perYear) + " times a year"
	case span < 1.05:
		return "once a year"
	case span < 9.95:
		return "once in " + significant(roundTo(span, 2)) + " years"
	case span < 1e6:
		return "once in " + whole(int64(math.Round(roundTo(span, 2)))) + " years"
	}
	return "once in more than a million years"
}

// kept says what was allowed, and how it is kept.
func kept(e *life.Evidence, a *life.Allowance) string {
	text := "allowed: " + clean(a.Text)
	if a.For == "indicator" {
		text += " over all series"
	} else {
		text += " on each series"
	}
	switch estimated := e.Baseline.Kind != "known"; {
	case estimated && a.Assurance > 0:
		text += fmt.Sprintf(", kept with %s confidence though the usual %s is estimated", level(1-a.Assurance), measure(e))
	case estimated:
		text += ", on average over how unsure the usual " + measure(e) + " is: on one series it may be several times as often"
	}
	return text
}

// allowedP writes the limit on p: as stated, or as it follows from an allowance.
func allowedP(e *life.Evidence) string {
	if e.Allowance == nil {
		return trimFloat(e.Limit)
	}
	return pvalue(math.Log10(e.Limit)) + ", so that the allowance is kept"
}
