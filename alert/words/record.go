package words

import (
	"fmt"
	"strings"
	"time"

	"tailbell/monitor/life"
)

// Record returns the whole record of an alert for a terminal of the given
// width: where it stands, the evidence, the numbers behind it, what was seen
// since, its history, and how to recompute it. The last line ends the text.
func Record(r *life.Record, width int) string {
	zone := zoneOf(r)
	var b strings.Builder
	condition := strings.ToUpper(clean(string(r.Condition)))
	if r.Shelf != nil {
		condition += " until " + moment(r.Shelf.Until.In(zone))
	}
	fmt.Fprintf(&b, "alert %s  %s  %s  %s\n", clean(r.ID), condition, arrow(r.Direction), clean(r.Series))
	paragraphs := []string{Sentence(r, &r.Opening), numbers(&r.Opening), basis(r, &r.Opening)}
	if r.Silence != nil {
		paragraphs = []string{unheard(r, zone)}
	} else if !sameLook(&r.Worst, &r.Opening) {
		paragraphs = append(paragraphs, "At its strongest: "+Sentence(r, &r.Worst))
	}
	paragraphs = append(paragraphs, afterwards(r, zone), turnedOut(r), sources(r))
	for _, p := range nonEmpty(paragraphs...) {
		b.WriteString(wrap(p, width, "    ", "    "))
	}
	b.WriteString("  history\n")
	for i := range r.Steps {
		b.WriteString(wrap(history(&r.Steps[i], r, zone), width, "    ", "      "))
	}
	if r.Opening.Recompute != "" {
		b.WriteString("  the same numbers again\n    " + clean(r.Opening.Recompute) + "\n")
	}
	b.WriteString(wrap(caution(r), width, "  ", "  "))
	return b.String()
}

// numbers gives the ratio and how the look was judged.
func numbers(e *life.Evidence) string {
	var b strings.Builder
	if e.Ratio != nil {
		kind := "ratio to the usual " + measure(e)
		if strings.Contains(e.RatioKind, "odds") {
			kind = "odds ratio to the usual proportion"
		}
		if e.RatioKind == life.StandardisedRatio {
			kind = "standardised ratio (observed over expected events)"
		}
		if e.RatioUpper != nil {
			lo, hi := pair(e.RatioLower, *e.RatioUpper)
			fmt.Fprintf(&b, "The %s is %s (%s to %s, %s, exact). ", kind, number(*e.Ratio), lo, hi, level(e.Alpha))
		} else {
			fmt.Fprintf(&b, "The %s is %s (at least %s, %s, exact). ", kind, number(*e.Ratio), number(e.RatioLower), level(e.Alpha))
		}
	}
	fmt.Fprintf(&b, "This look signals at %s (chance %s while the usual %s holds; p allowed: %s).",
		whole(e.Critical), number(e.AttainedSize), measure(e), allowedP(e))
	if e.Test != "" {
		b.WriteString(" Test: " + stop(clean(e.Test)))
	}
	b.WriteString(" p is that of one window; looking again and again rings oftener by chance.")
	return b.String()
}

// turnedOut is the mark that stands.
func turnedOut(r *life.Record) string {
	if r.Mark == life.NotMarked {
		return ""
	}
	return "What it turned out to be, as people have marked it: " + clean(string(r.Mark)) + "."
}

func sources(r *life.Record) string {
	if len(r.IDs) == 0 {
		return ""
	}
	ids := make([]string, len(r.IDs))
	for i, id := range r.IDs {
		ids[i] = clean(id)
	}
	text := "Observations: " + strings.Join(ids, ", ")
	if r.MoreIDs > 0 {
		text += " and " + whole(int64(r.MoreIDs)) + " more"
	}
	return stop(text)
}

// history is one line of the record's history.
func history(s *life.Step, r *life.Record, zone *time.Location) string {
	n := life.Notice{Step: *s, Record: *r}
	text := stamp(s.At.In(zone)) + "  " + strings.ToLower(what(&n))
	if s.Kind == life.StepMarked {
		text = stamp(s.At.In(zone)) + "  " + marked(s)
	}
	if s.By != "" {
		text += " by " + clean(s.By)
	}
	if s.Until != nil {
		text += " until " + moment(s.Until.In(zone))
	}
	switch {
	case s.Why == "":
	case s.By == "":
		text += ": " + clean(s.Why)
	default:
		text += ": \u201c" + clean(s.Why) + "\u201d"
	}
	if e := s.Evidence; e != nil {
		text += " (" + counted(e) + " in the " + span(e, zone) + ", p = " + pvalue(log10p(e)) + ")"
	}
	if string(s.Kind) == string(s.Condition) {
		return stop(text)
	}
	return text + "; now " + clean(string(s.Condition)) + "."
}
