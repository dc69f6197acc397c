package life

import (
	"errors"
	"fmt"
	"slices"
)

// ErrNotAllowed is returned for a step that the alert's condition does not
// allow, such as acknowledging it twice.
var ErrNotAllowed = errors.New("not allowed")

// after is the transition table: the condition after a step of a kind, by the
// condition before it. What is not in it is not allowed.
var after = map[StepKind]map[Condition]Condition{
	StepOpened: {"": Unacknowledged},
	StepWorsened: {
		Unacknowledged: Unacknowledged,
		Acknowledged:   Acknowledged,
	},
	StepCorrected: {
		Unacknowledged: Unacknowledged,
		Acknowledged:   Acknowledged,
		Returned:       Returned,
		Closed:         Closed,
	},
	StepReturned: {
		Unacknowledged: Returned,
		Acknowledged:   Returned,
	},
	StepWithdrawn: {
		Unacknowledged: Withdrawn,
		Acknowledged:   Withdrawn,
		Returned:       Withdrawn,
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
	},
	StepMarked: {
		Unacknowledged: Unacknowledged,
		Acknowledged:   Acknowledged,
		Returned:       Returned,
		Closed:         Closed,
		Withdrawn:      Withdrawn,
	},
	StepNote: {
		Unacknowledged: Unacknowledged,
		Acknowledged:   Acknowledged,
		Returned:       Returned,
		Closed:         Closed,
		Withdrawn:      Withdrawn,
	},
}

// ReturnedAndAcknowledged is the reason given when an alert closes by itself.
const ReturnedAndAcknowledged = "returned and acknowledged"

// Take adds one step to the record and returns what outlets must deliver: the
// step, and a second one when it closes the alert because it has returned and
// is acknowledged. The step's Number and Condition are filled in. A step that
// the condition does not allow is ErrNotAllowed and changes nothing.
func (r *Record) Take(s Step) ([]Notice, error) {
	next, ok := after[s.Kind][r.Condition]
	if !ok {
		return nil, fmt.Errorf("life: alert %s is %s and can't be %s: %w", r.ID, r.Condition, s.Kind, ErrNotAllowed)
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

// closesAfter reports whether the alert is now both returned and
// acknowledged.
func (r *Record) closesAfter(k StepKind) bool {
	if r.Condition != Returned || (k != StepReturned && k != StepAcknowledged) {
		return false
	}
	for _, s := range r.Steps {
		if s.Kind == StepAcknowledged {
			return true
		}
	}
	return false
}

func (r *Record) take(s Step, next Condition) Notice {
	r.Condition = next
	if s.Kind == StepMarked {
		r.Mark = s.Mark
	}
	s.Number = len(r.Steps) + 1
	s.At = s.At.UTC()
	s.Condition = next
	r.Steps = append(r.Steps, s)
	n := Notice{Key: Key(r.ID, s.Number), Step: s, Record: *r}
	n.Record.Steps = brief(r.Steps)
	return n
}

// brief copies the steps without the evidence of all but the last: each of
// them was a notice of its own.
func brief(steps []Step) []Step {
	short := slices.Clone(steps)
	for i := range short[:len(short)-1] {
		short[i].Evidence = nil
	}
	return short
}

// Key is the idempotency key of a step.
func Key(alert string, number int) string { return fmt.Sprintf("%s.%d", alert, number) }
