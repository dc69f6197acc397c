// Package words says in plain sentences what an alert record holds: for a
// terminal, and as paragraphs for a mail or a page.
//
// One reading by a nurse, acceptable to a statistician. Every sentence is made
// from the record alone, so the same record gives the same words anywhere. A
// sentence says what was counted, over which time and exposure, what would be
// usual, and how often so much (or so little) comes by chance while the usual
// rate holds. Bounds of a window that was chosen because it rang are labelled
// so.
//
// # Dates
//
// Dates stand in the record's zone. A window is half-open: one that ends at
// the midnight after 3 March is "to 3 March", the last day that it holds;
// windows that do not begin and end at midnight show the hour.
//
// # Digits
//
// Counts and exposures are exact, in groups of three. Expected numbers, rates
// and bounds have one decimal from 1 to 1,000, none above, and two significant
// digits below 1; two bounds that lie close together get as many decimals as
// their difference needs for two significant digits. p has two significant
// digits, as a plain decimal down to 0.0001 and as 2.3e-9 below, with its odds
// beside it ("about 1 of 430 million"). Numbers are rounded to nearest, bounds
// too, so that they agree with the same bounds printed elsewhere.
//
// # Caveats
//
// p is that of one window. Windows overlap and many are looked at, so rings by
// chance are more frequent than one p says. Names of people, reasons and
// sources are printed as they came, but for control characters, which are
// replaced.
package words

import (
	"fmt"
	"strings"
	"time"

	"tailbell/monitor/life"
)

// Caution stands on every opened alert whose record brings none of its own.
const Caution = "A signal is a statistical finding, not a diagnosis and not a cause; " +
	"silence is no proof of safety; local policy decides."

// Notice returns one step of an alert for a terminal of the given width in
// characters: a heading, the sentences under it, and an empty line. A width
// under 40 is taken as 40.
func Notice(n *life.Notice, width int) string {
	var b strings.Builder
	b.WriteString(Heading(n))
	b.WriteByte('\n')
	for _, p := range Paragraphs(n) {
		b.WriteString(wrap(p, width, "    ", "    "))
	}
	b.WriteByte('\n')
	return b.String()
}

// Line returns one step of an alert on one line, for lists and for steps of
// little weight: heading, place, and the numbers in short.
func Line(n *life.Notice) string {
	r := &n.Record
	zone := zoneOf(r)
	text := Heading(n) + "  " + place(r)
	if r.Silence != nil {
		return text + silentLine(n, zone)
	}
	switch n.Step.Kind {
	case life.StepOpened, life.StepWorsened, life.StepCorrected:
		return text + ": " + brief(evidenceOf(&n.Step, &r.Opening), zone)
	case life.StepReminder:
		return text + ": " + brief(&r.Worst, zone)
	case life.StepAcknowledged, life.StepNote, life.StepClosed, life.StepReturned, life.StepWithdrawn, life.StepMarked,
		life.StepShelved, life.StepUnshelved, life.StepTest:
	}
	text += ", " + noun(&r.Opening)
	if n.Step.Until != nil {
		text += ", until " + moment(n.Step.Until.In(zone))
	}
	if n.Step.Kind == life.StepMarked {
		text += ", " + marked(&n.Step)
	}
	if n.Step.By != "" {
		text += ", by " + clean(n.Step.By)
	}
	if n.Step.Why != "" {
		text += ": " + clean(n.Step.Why)
	}
	return text
}

// Heading returns one line: when, what happened, in which direction, and to
// which alert.
func Heading(n *life.Notice) string {
	zone := zoneOf(&n.Record)
	if n.Step.Kind == life.StepTest {
		return stamp(n.Step.At.In(zone)) + "  " + what(n)
	}
	return fmt.Sprintf("%s  %s  %s  alert %s",
		stamp(n.Step.At.In(zone)), what(n), arrow(n.Record.Direction), clean(n.Record.ID))
}

// Paragraphs returns the sentences of one step, not wrapped, the caution last
// where somebody is called to act for the first time, or again after a while. A
// message that tells of a later step by itself adds it.
func Paragraphs(n *life.Notice) []string {
	r := &n.Record
	zone := zoneOf(r)
	if r.Silence != nil {
		return silent(n, zone)
	}
	switch n.Step.Kind {
	case life.StepOpened:
		return opened(n, zone)
	case life.StepWorsened:
		return nonEmpty(finding(r, evidenceOf(&n.Step, &r.Worst)), worsened(n, zone)+afterwards(r, zone))
	case life.StepCorrected:
		return nonEmpty(corrected(n, zone))
	case life.StepReturned:
		return nonEmpty(subject(r)+": no window signals any more ("+story(r, zone)+")."+afterwards(r, zone)+" "+
			standing(r)+" A return is no proof that the cause is gone.", reasonOf(&n.Step))
	case life.StepWithdrawn:
		return nonEmpty(subject(r) + ": withdrawn, as the data were corrected. With the data as they now stand the look due on " +
			moment(r.Opened.In(zone)) + " gives no signal. This is not a return to usual: with right data it would not have rung.")
	case life.StepAcknowledged, life.StepClosed, life.StepNote, life.StepMarked:
		return nonEmpty(acted(n, zone))
	case life.StepShelved, life.StepUnshelved:
		return shelf(n, zone)
	case life.StepReminder:
		return reminder(n, zone)
	case life.StepTest:
		return nonEmpty(clean(n.Step.Why), caution(r))
	}
	return nonEmpty(subject(r) + ": " + clean(string(n.Step.Kind)) + ".")
}

func opened(n *life.Notice, zone *time.Location) []string {
	r := &n.Record
	e := evidenceOf(&n.Step, &r.Opening)
	late := ""
	if r.Late {
		late = "Opened late: the look was due on " + moment(e.Due.In(zone)) + "; data that came afterwards made it signal."
	}
	return nonEmpty(Sentence(r, e), late, basis(r, e), caution(r))
}

// worsened says whether the evidence has grown, or a further window signals.
// The engine takes the step for one of the two; evidence that is weaker than
// the strongest so far can only be the latter.
func worsened(n *life.Notice, zone *time.Location) string {
	r := &n.Record
	e := evidenceOf(&n.Step, &r.Worst)
	if sameLook(e, &r.Worst) {
		return "The evidence has grown since the alert was " + strings.TrimSuffix(openedOn(r, zone), ",") + "."
	}
	which := ""
	if !seenBefore(n, e.Window) {
		which = ", that of " + length(e.Window) + ","
	}
	return "A further window" + which + " signals too. The strongest evidence is still " + brief(&r.Worst, zone) + "."
}

func sameLook(a, b *life.Evidence) bool { return a.Window == b.Window && a.Due.Equal(b.Due) }

// seenBefore reports whether evidence of the window was in the record before
// the step.
func seenBefore(n *life.Notice, window string) bool {
	r := &n.Record
	seen := r.Opening.Window == window || r.Worst.Window == window
	for i := range r.Steps {
		s := &r.Steps[i]
		seen = seen || s.Number < n.Step.Number && s.Evidence != nil && s.Evidence.Window == window
	}
	return seen
}

func acted(n *life.Notice, zone *time.Location) string {
	s, r := &n.Step, &n.Record
	by := ""
	if s.By != "" {
		by = " by " + clean(s.By)
	}
	verb := ""
	switch s.Kind {
	case life.StepAcknowledged:
		verb = "acknowledged" + by
	case life.StepClosed:
		verb = "closed" + by
		if by == "" && s.Why != "" {
			verb = clean(s.Why) + ", so closed"
		}
	case life.StepNote:
		verb = "note" + by
	case life.StepMarked:
		verb = marked(s) + by
	case life.StepOpened, life.StepWorsened, life.StepCorrected, life.StepReturned, life.StepWithdrawn,
		life.StepShelved, life.StepUnshelved, life.StepReminder, life.StepTest:
		verb = string(s.Kind)
	}
	text := subject(r) + ": " + verb
	if s.Why != "" && s.By != "" {
		text += ": \u201c" + clean(s.Why) + "\u201d"
	}
	text = stop(text) + " (" + capital(story(r, zone)) + ".)"
	if s.Kind == life.StepAcknowledged && s.Condition == life.Acknowledged {
		text += " It still signals."
	}
	return text + closedEarly(n)
}

// marked says what a person says an alert turned out to be.
func marked(s *life.Step) string {
	if s.Mark == life.NotMarked {
		return "mark taken back"
	}
	return "marked as " + clean(string(s.Mark))
}

// story names the alert by its opening evidence.
func story(r *life.Record, zone *time.Location) string {
	e := &r.Opening
	return openedOn(r, zone) + " by " + counted(e) + " in the " + span(e, zone) +
		"; about " + expected(e) + " would be usual"
}

// openedOn says on which day the alert opened, and when that was later than its
// look was due.
func openedOn(r *life.Record, zone *time.Location) string {
	if r.Late {
		return "opened late on " + day(r.OpenedAt().In(zone)) + ", for the look due on " + moment(r.Opened.In(zone)) + ","
	}
	return "opened on " + day(r.OpenedAt().In(zone))
}

func corrected(n *life.Notice, zone *time.Location) string {
	r := &n.Record
	text := subject(r) + ": data that came late or were corrected changed the evidence. At the opening it is now " +
		brief(&r.Opening, zone) + "."
	if sameLook(&r.Worst, &r.Opening) {
		return text
	}
	return text + " At its strongest it is " + brief(&r.Worst, zone) + "."
}

// standing says whether somebody has acknowledged an alert that has returned.
func standing(r *life.Record) string {
	acknowledged := -1
	for i := range r.Steps {
		if r.Steps[i].Kind == life.StepAcknowledged {
			acknowledged = i
		}
	}
	switch {
	case acknowledged < 0:
		return "Nobody has acknowledged it yet."
	case !r.Acknowledged():
		return "Nobody has acknowledged it since it came off the shelf."
	case r.Steps[acknowledged].By != "":
		return "It was acknowledged by " + clean(r.Steps[acknowledged].By) + " before."
	}
	return "It was acknowledged before."
}

func reasonOf(s *life.Step) string {
	if s.Why == "" {
		return ""
	}
	return "Reason given: " + stop(clean(s.Why))
}

// what is the word for what happened; the words differ without any colour.
func what(n *life.Notice) string {
	switch n.Step.Kind {
	case life.StepOpened:
		if n.Record.Late {
			return "OPENED LATE"
		}
		return "OPENED"
	case life.StepWorsened:
		return "WORSENED"
	case life.StepCorrected:
		return "EVIDENCE CORRECTED"
	case life.StepReturned:
		return "RETURNED"
	case life.StepWithdrawn:
		return "WITHDRAWN"
	case life.StepAcknowledged:
		return "ACKNOWLEDGED"
	case life.StepClosed:
		return "CLOSED"
	case life.StepNote:
		return "NOTE"
	case life.StepMarked:
		return "MARKED"
	case life.StepShelved:
		return "SHELVED"
	case life.StepUnshelved:
		return "OFF THE SHELF"
	case life.StepReminder:
		return "NOT YET ACKNOWLEDGED"
	case life.StepTest:
		return "TEST, NO ALERT"
	}
	return strings.ToUpper(clean(string(n.Step.Kind)))
}

func arrow(d life.Direction) string {
	switch d {
	case life.Silence:
		return "\u25c7 nothing heard"
	case life.Upper:
		return "\u25b2 more than usual"
	case life.Lower:
		return "\u25bc fewer than usual"
	}
	return clean(string(d))
}

// caution is the record's own, which is the one that was in force.
func caution(r *life.Record) string {
	if r.Caution != "" {
		return clean(r.Caution)
	}
	return Caution
}

func evidenceOf(s *life.Step, otherwise *life.Evidence) *life.Evidence {
	if s.Evidence != nil {
		return s.Evidence
	}
	return otherwise
}

func nonEmpty(paragraphs ...string) []string {
	kept := paragraphs[:0]
	for _, p := range paragraphs {
		if p = strings.TrimSpace(p); p != "" {
			kept = append(kept, p)
		}
	}
	return kept
}
