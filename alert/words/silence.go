package words

import (
	"time"

	"tailbell/monitor/life"
)

// A silence is told without numbers: there is no count, and no chance of it.

// unheard says how long nothing was heard of a series, and what was expected.
func unheard(r *life.Record, zone *time.Location) string {
	h := r.Silence
	text := place(r) + ": nothing was ever reported"
	if h.Last != nil {
		text = place(r) + ": nothing has been reported since " + moment(h.Last.In(zone))
	}
	return text + "; something is expected within " + clean(h.Within) +
		". That is no count of zero: ask whoever reports " + titleOf(r) + " there."
}

// silent returns the sentences of one step of a silence.
func silent(n *life.Notice, zone *time.Location) []string {
	r, s := &n.Record, &n.Step
	switch s.Kind {
	case life.StepOpened:
		return nonEmpty(unheard(r, zone), caution(r))
	case life.StepReminder:
		text := "Nobody has acknowledged it yet."
		if since, ok := r.Unheeded(); ok {
			text = "Nobody has acknowledged it for " + Elapsed(s.At.Sub(since)) + "."
		}
		return nonEmpty(unheard(r, zone)+" "+text, caution(r))
	case life.StepReturned:
		text := place(r) + ": heard of again, after a silence that was told of at " + moment(r.Opened.In(zone)) + ". " + standing(r)
		return nonEmpty(text+" What happened meanwhile may still be missing.", reasonOf(s))
	case life.StepUnshelved:
		if s.Condition == life.Returned {
			return nonEmpty(place(r) + ": off the shelf; it was heard of again meanwhile.")
		}
		return nonEmpty(unheard(r, zone)+" It is off the shelf, and waits for somebody to acknowledge it.", caution(r))
	case life.StepAcknowledged, life.StepClosed, life.StepNote, life.StepMarked, life.StepShelved,
		life.StepWorsened, life.StepCorrected, life.StepWithdrawn, life.StepTest:
	}
	text := place(r) + ", silence: " + string(s.Kind)
	if s.Kind == life.StepMarked {
		text = place(r) + ", silence: " + marked(s)
	}
	text += byWhom(s)
	if s.Until != nil {
		text += " until " + moment(s.Until.In(zone))
	}
	return nonEmpty(stop(text+reason(s)) + closedEarly(n))
}

// silentLine is what follows the heading where a step stands on one line.
func silentLine(n *life.Notice, zone *time.Location) string {
	text, s := "", &n.Step
	switch h := n.Record.Silence; {
	case s.Kind != life.StepOpened && s.Kind != life.StepReminder:
	case h.Last == nil:
		text = ": never heard of"
	default:
		text = ": last heard of " + moment(h.Last.In(zone)) + ", expected within " + clean(h.Within)
	}
	if s.Until != nil {
		text += ", until " + moment(s.Until.In(zone))
	}
	if s.Kind == life.StepMarked {
		text += ", " + marked(s)
	}
	return text + byWhom(s) + reason(s)
}
