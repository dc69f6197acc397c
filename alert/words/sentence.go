package words

import (
	"fmt"
	"math"
	"strings"
	"time"

	"tailbell/monitor/life"
)

// Sentence says in plain words what one look found: the place, the count, the
// span, the exposure, what would be usual, how often so much or so little
// comes by chance, and the exact bounds of the rate.
func Sentence(r *life.Record, e *life.Evidence) string {
	if r.Silence != nil {
		return unheard(r, zoneOf(r))
	}
	return finding(r, e) + carriers(r, e) + " " + bounds(e)
}

// finding is the sentence without the bounds.
func finding(r *life.Record, e *life.Evidence) string {
	return place(r) + ": " + counted(e) + " in the " + span(e, zoneOf(r)) + " (" + exposed(e, zoneOf(r)) + provisional(e) + signedOff(e) + lateShare(e) + "); about " +
		expected(e) + " would be usual. " + chance(e, r.Direction)
}

// subject is the place and what is counted there.
func subject(r *life.Record) string {
	return place(r) + ", " + noun(&r.Opening)
}

func noun(e *life.Evidence) string {
	if e.EventNoun == "" {
		return "events"
	}
	return clean(e.EventNoun)
}

// counted is "4 line infections", "1 fall", "no falls".
func counted(e *life.Evidence) string {
	switch e.Events {
	case 0:
		return "no " + noun(e)
	case 1:
		return "1 " + singular(noun(e))
	}
	return whole(e.Events) + " " + noun(e)
}

// exposure is "616 device-days"; of a proportion, "80 procedures".
func exposure(e *life.Evidence) string {
	unit := clean(e.Unit)
	if e.Exposure == "1" {
		unit = singular(unit)
	}
	return grouped(clean(e.Exposure)) + " " + unit
}

// provisional says that not all of the exposure has been reported yet.
func provisional(e *life.Evidence) string {
	if e.Provisional > 0 {
		return ", provisional"
	}
	return ""
}

// signedOff says that people have declared the counts final, and what changed
// after that.
func signedOff(e *life.Evidence) string {
	text := ""
	if e.SignedOff {
		text = ", signed off"
	}
	switch e.AfterSignOff {
	case 0:
		return text
	case 1:
		return text + "; 1 slot changed after it was signed off"
	}
	return text + "; " + whole(e.AfterSignOff) + " slots changed after they were signed off"
}

func lateShare(e *life.Evidence) string {
	switch {
	case e.LateEvents <= 0:
		return ""
	case e.LateEvents >= e.Events && e.Events <= 1:
		return "; reported late"
	case e.LateEvents >= e.Events:
		return "; all of them reported late"
	}
	return "; " + whole(e.LateEvents) + " of the " + whole(e.Events) + " reported late"
}

func expected(e *life.Evidence) string { return number(e.Expected) }

// brief gives the numbers of a look in one short phrase.
func brief(e *life.Evidence, zone *time.Location) string {
	return counted(e) + " in the " + span(e, zone) + " (" + exposed(e, zone) + "), about " + expected(e) +
		" usual, p = " + pvalue(log10p(e))
}

// chance says how often so many, or so few, are seen while the usual rate
// holds. It reads the logarithm, so that the smallest p is told truly.
func chance(e *life.Evidence, d life.Direction) string {
	such := ""
	switch {
	case d == life.Upper:
		such = whole(e.Events) + " or more"
	case e.Events == 0:
		such = "none at all"
	default:
		such = whole(e.Events) + " or fewer"
	}
	return fmt.Sprintf("If %s, %s would be seen in %s such windows (p = %s).",
		hypothesis(e, d), such, odds(log10p(e)), pvalue(log10p(e)))
}

func hypothesis(e *life.Evidence, d life.Direction) string {
	m := e.Baseline.Margin
	if m == 0 || m == 1 {
		return "the usual " + measure(e) + " held"
	}
	if d == life.Lower {
		m = 1 / m
	}
	what := measure(e) + " were"
	if strings.Contains(e.RatioKind, "odds") {
		what = "odds were"
	}
	return "the " + what + " " + significant(m) + " times the usual (the margin that is accepted)"
}

// measure is "rate" or "proportion", as the record names it.
func measure(e *life.Evidence) string {
	if isProportion(e) {
		return "proportion"
	}
	return "rate"
}

func isProportion(e *life.Evidence) bool { return e.Measure == "proportion" }

func log10p(e *life.Evidence) float64 {
	if e.Log10P == 0 && e.P > 0 && e.P < 1 {
		return math.Log10(e.P)
	}
	return e.Log10P
}

// bounds gives the exact bounds of the rate, and the usual rate beside them.
func bounds(e *life.Evidence) string {
	chosen := ""
	if e.Chosen {
		chosen = ", chosen because it rang,"
	}
	lo, hi := pair(e.RateLower*scale(e), e.RateUpper*scale(e))
	return fmt.Sprintf("The %s in this window%s is %s to %s%s (%s, exact); usual is %s%s.",
		measure(e), chosen, lo, hi, per(e), level(e.Alpha), usual(e), short(e))
}

// usual gives the usual rate as it was declared or, of a reference, computed,
// to four significant digits at most.
func usual(e *life.Evidence) string { return significant(e.Baseline.Rate * scale(e)) }

// scale turns a record's rate into the number shown: a proportion per one
// trial is shown in per cent.
func scale(e *life.Evidence) float64 {
	if isProportion(e) && (e.Per == 0 || e.Per == 1) {
		return 100
	}
	return 1
}

// per is what follows a rate: " per 1,000 device-days", or " %".
func per(e *life.Evidence) string {
	unit := clean(e.Unit)
	switch {
	case isProportion(e) && (e.Per == 0 || e.Per == 1 || e.Per == 100):
		return " %"
	case e.Per == 0 || e.Per == 1:
		return " per " + singular(unit)
	}
	return " per " + multiple(e.Per) + " " + unit
}

// multiple writes the number of units for which a rate is given.
func multiple(per float64) string {
	switch per {
	case 1e6:
		return "million"
	case 1e9:
		return "billion"
	}
	return grouped(trimFloat(per))
}

// short is what follows a second rate in the same sentence.
func short(e *life.Evidence) string {
	if p := per(e); p == " %" {
		return p
	}
	return ""
}

func level(alpha float64) string {
	return trimFloat(math.Round((1-alpha)*1e8)/1e6) + " %"
}

// afterwards tells of the data after the opening look, which the ring did not
// choose.
func afterwards(r *life.Record, zone *time.Location) string {
	s := r.Since
	if s == nil {
		return ""
	}
	e := r.Opening
	e.Events, e.Exposure = s.Events, s.Exposure
	since := "the opening look"
	if s.From.After(r.Opening.To) { // what lies before is not kept any more
		since = moment(s.From.In(zone))
	}
	text := " Since " + since + ", to " + last(s.To.In(zone)) + ": " + counted(&e) + " in " + exposure(&e)
	if s.RateUpper == nil {
		return text + "."
	}
	lo, hi := pair(s.RateLower*scale(&e), *s.RateUpper*scale(&e))
	return text + fmt.Sprintf(", %s to %s%s (%s, exact, not chosen by the ring).", lo, hi, per(&e), level(e.Alpha))
}
