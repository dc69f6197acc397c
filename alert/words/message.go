package words

import (
	"strings"

	"tailbell/monitor/life"
)

// What is the word for what happened to an alert: "OPENED LATE".
func What(n *life.Notice) string { return what(n) }

// Direction says with a shape and words where an alert points: "▲ more than
// usual".
func Direction(d life.Direction) string { return arrow(d) }

// Span writes the time that a look covers: "28 days to 3 March 2026".
func Span(r *life.Record, e *life.Evidence) string { return span(e, zoneOf(r)) }

// When writes when a step was taken, in the alert's zone.
func When(n *life.Notice) string { return stamp(n.Step.At.In(zoneOf(&n.Record))) }

// Subject is one short line that says what happened, and where.
func Subject(n *life.Notice) string {
	r := &n.Record
	text := sentenceCase(what(n)) + ": "
	if r.Silence != nil {
		return text + "nothing heard of " + place(r)
	}
	switch n.Step.Kind {
	case life.StepTest:
		return text + "a trial of this outlet"
	case life.StepOpened, life.StepWorsened, life.StepReminder, life.StepUnshelved, life.StepCorrected:
		if n.Step.Condition == life.Returned {
			break
		}
		e := toldOf(n)
		return text + counted(e) + ", about " + expected(e) + " usual: " + place(r)
	case life.StepAcknowledged, life.StepShelved, life.StepReturned, life.StepWithdrawn, life.StepClosed, life.StepNote, life.StepMarked:
	}
	return text + subject(r)
}

// toldOf is the evidence that a step tells of: its own, or the strongest so far.
func toldOf(n *life.Notice) *life.Evidence {
	if n.Record.Worst.Window == "" {
		return evidenceOf(&n.Step, &n.Record.Opening)
	}
	return evidenceOf(&n.Step, &n.Record.Worst)
}

// SubjectTogether is that line for several steps of one kind and indicator.
func SubjectTogether(notices []*life.Notice) string {
	n := notices[0]
	return sentenceCase(what(n)) + ": " + AmountTogether(notices)
}

// AmountTogether is how many series of what are told of together.
func AmountTogether(notices []*life.Notice) string {
	return Amount(int64(len(notices)), "series") + " of " + titleOf(&notices[0].Record)
}

// titleOf is the indicator's name for people.
func titleOf(r *life.Record) string {
	if r.Title != "" {
		return clean(r.Title)
	}
	return clean(r.Indicator)
}

// sentenceCase writes a word in capitals as a sentence begins.
func sentenceCase(s string) string { return capital(strings.ToLower(s)) }

// Fact is a number behind a sentence, with its name.
type Fact struct{ Name, Value string }

// Facts are the numbers behind the sentences of a step, for a table beside
// them; none where the record has no evidence.
func Facts(n *life.Notice) []Fact {
	r := &n.Record
	e := toldOf(n)
	if e.Window == "" {
		return nil
	}
	rate := measure(e) + " in this window"
	if e.Chosen {
		rate += ", chosen because it rang"
	}
	lo, hi := pair(e.RateLower*scale(e), e.RateUpper*scale(e))
	facts := []Fact{
		{"window", span(e, zoneOf(r))},
		{"counted", counted(e) + " in " + exposure(e) + provisional(e) + lateShare(e)},
		{"usual", "about " + expected(e) + "; " + measure(e) + " " + usual(e) + per(e)},
		{"p of this window", pvalue(log10p(e)) + ", " + odds(log10p(e))},
		{rate, lo + " to " + hi + per(e) + " (" + level(e.Alpha) + ", exact)"},
	}
	if e.Ratio != nil {
		name := "ratio to the usual"
		if e.RatioKind == life.StandardisedRatio {
			name = "standardised ratio"
		}
		facts = append(facts, Fact{name, ratio(e)})
	}
	if e.Critical > 0 || r.Direction == life.Lower {
		facts = append(facts, Fact{"a look signals at", whole(e.Critical) + " (chance " + number(e.AttainedSize) + ")"})
	}
	return append(facts, Fact{"alert", clean(r.ID) + ", " + clean(string(r.Condition))})
}

// ratio is the ratio to what is usual with its exact bounds.
func ratio(e *life.Evidence) string {
	text := number(*e.Ratio)
	if strings.Contains(e.RatioKind, "odds") {
		text = "odds ratio " + text
	}
	if e.RatioUpper == nil {
		return text + " (at least " + number(e.RatioLower) + ", " + level(e.Alpha) + ", exact)"
	}
	lo, hi := pair(e.RatioLower, *e.RatioUpper)
	return text + " (" + lo + " to " + hi + ", " + level(e.Alpha) + ", exact)"
}
