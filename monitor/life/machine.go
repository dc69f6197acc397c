package life

import (
	"errors"
	"fmt"
	"slices"
	"time"
)

// ErrNotAllowed is returned for a step that the alert's condition does not
// allow, such as acknowledging it twice.
var ErrNotAllowed = errors.New("not allowed")

// notAllowedError is an ErrNotAllowed that says of which alert.
type notAllowedError struct{ text string }

func (e *notAllowedError) Error() string { return e.text }

// Unwrap makes it an ErrNotAllowed.
func (*notAllowedError) Unwrap() error { return ErrNotAllowed }

// after is the transition table: the condition after a step of a kind, by the
// condition before it. What is not in it is not allowed.
var after = map[StepKind]map[Condition]Condition{
	StepOpened: {"": Unacknowledged},
	StepWorsened: {
		Unacknowledged: Unacknowledged,
		Acknowledged:   Acknowledged,
		Shelved:        Shelved,
	},
	StepCorrected: {
		Unacknowledged: Unacknowledged,
		Acknowledged:   Acknowledged,
		Returned:       Returned,
		Shelved:        Shelved,
		Closed:         Closed,
	},
	StepReturned: {
		Unacknowledged: Returned,
		Acknowledged:   Returned,
		Shelved:        Shelved,
	},
	StepWithdrawn: {
		Unacknowledged: Withdrawn,
		Acknowledged:   Withdrawn,
		Returned:       Withdrawn,
		Shelved:        Withdrawn,
		Closed:         Withdrawn,
	},
	StepAcknowledged: {
		Unacknowledged: Acknowledged,
		Returned:       Returned,
	},
	StepClosed: {
		Unacknowledged: Closed,
		Acknowledged:   Closed,
		Returned:       Closed,
		Shelved:        Closed,
	},
	StepMarked: {
		Unacknowledged: Unacknowledged,
		Acknowledged:   Acknowledged,
		Returned:       Returned,
		Shelved:        Shelved,
		Closed:         Closed,
		Withdrawn:      Withdrawn,
	},
	StepNote: {
		Unacknowledged: Unacknowledged,
		Acknowledged:   Acknowledged,
		Returned:       Returned,
		Shelved:        Shelved,
		Closed:         Closed,
		Withdrawn:      Withdrawn,
	},
	StepShelved: {
		Unacknowledged: Shelved,
		Acknowledged:   Shelved,
		Shelved:        Shelved, // for longer, or less long
	},
	StepUnshelved: {
		Shelved: Unacknowledged, // or returned: see offShelf
	},
}

// ReturnedAndAcknowledged is the reason given when an alert closes by itself.
const ReturnedAndAcknowledged = "returned and acknowledged"

// NoLongerMonitored is the reason given when an alert closes because its
// indicator is in the set-up no more.
const NoLongerMonitored = "no longer monitored"

// Take adds one step to the record and returns what outlets must deliver: the
// step, and a second one when it closes the alert because it has returned and
// is acknowledged. The step's Number and Condition are filled in. A step that
// the condition does not allow is ErrNotAllowed and changes nothing.
func (r *Record) Take(s Step) ([]Notice, error) {
	next, ok := after[s.Kind][r.Condition]
	if !ok {
		return nil, &notAllowedError{fmt.Sprintf("alert %s is %s and can't be %s", r.ID, r.Condition, s.Kind)}
	}
	if s.Kind == StepUnshelved {
		next = r.offShelf()
	}
	notices := []Notice{r.take(s, next)}
	if done := r.closesAfter(s.Kind); done {
		notices = append(notices, r.take(Step{Kind: StepClosed, At: s.At, Why: ReturnedAndAcknowledged}, Closed))
	}
	return notices, nil
}

// Allows reports whether the condition allows a step of the kind.
func (r *Record) Allows(k StepKind) bool {
	_, ok := after[k][r.Condition]
	return ok
}

// offShelf is the condition of an alert that comes off the shelf.
func (r *Record) offShelf() Condition {
	if r.Left() {
		return Returned
	}
	return Unacknowledged
}

// closesAfter reports whether the alert is now both returned and
// acknowledged.
func (r *Record) closesAfter(k StepKind) bool {
	if r.Condition != Returned || (k != StepReturned && k != StepAcknowledged && k != StepUnshelved) {
		return false
	}
	return r.Acknowledged()
}

func (r *Record) take(s Step, next Condition) Notice {
	r.Condition = next
	switch {
	case s.Kind == StepMarked:
		r.Mark = s.Mark
	case s.Kind == StepShelved && s.Until != nil:
		until := s.Until.UTC()
		s.Until = &until
		r.Shelf = &Shelf{Until: until, By: s.By, Why: s.Why}
	}
	if next != Shelved {
		r.Shelf = nil
	}
	s.Number = len(r.Steps) + 1
	s.At = s.At.UTC()
	s.Condition = next
	r.Steps = append(r.Steps, s)
	n := Notice{Key: Key(r.ID, s.Number), Step: s, Record: *r}
	n.Record.Steps = brief(r.Steps)
	return n
}

// Reminder returns what outlets are told when nobody has acknowledged the
// alert for the n-th interval. It is no step of the record, whose state stays
// as it is; its key is its own.
func (r *Record) Reminder(n int64, at time.Time, to string) Notice {
	s := Step{Number: len(r.Steps), Kind: StepReminder, At: at.UTC(), Condition: r.Condition}
	notice := Notice{Key: fmt.Sprintf("%s.%d.r%d", r.ID, r.unheeded(), n), Step: s, Record: *r, To: to}
	notice.Record.Steps = brief(r.Steps)
	return notice
}

// Unheeded returns since when the alert has signalled without anybody
// acknowledging it: it opened then, or came back from the shelf. ok is false if
// it does not.
func (r *Record) Unheeded() (since time.Time, ok bool) {
	if r.Condition != Unacknowledged || len(r.Steps) == 0 {
		return since, false
	}
	return r.Steps[r.unheeded()-1].At, true
}

// unheeded is the number of the step since which the alert waits.
func (r *Record) unheeded() int {
	for i := len(r.Steps) - 1; i > 0; i-- {
		if r.Steps[i].Kind == StepUnshelved {
			return i + 1
		}
	}
	return 1
}

// brief copies the steps without the evidence of all but the last: each of
// them was a notice of its own.
func brief(steps []Step) []Step {
	short := slices.Clone(steps)
	for i := range short[:max(len(short)-1, 0)] {
		short[i].Evidence = nil
	}
	return short
}

// Key is the idempotency key of a step.
func Key(alert string, number int) string { return fmt.Sprintf("%s.%d", alert, number) }
