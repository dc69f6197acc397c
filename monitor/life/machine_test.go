package life

import (
	"errors"
	"testing"
	"time"
)

var moment = time.Date(2026, 3, 3, 0, 0, 0, 0, time.UTC)

// take takes steps of the given kinds and returns the kinds that came of them.
func take(t *testing.T, r *Record, kinds ...StepKind) []StepKind {
	t.Helper()
	var got []StepKind
	for i, kind := range kinds {
		notices, err := r.Take(Step{Kind: kind, At: moment.Add(time.Duration(i) * time.Hour)})
		if err != nil {
			t.Fatalf("step %d: %v", i+1, err)
		}
		for _, n := range notices {
			got = append(got, n.Step.Kind)
		}
	}
	return got
}

// TestCourses walks the ways that an alert can go.
func TestCourses(t *testing.T) {
	for _, course := range []struct {
		name  string
		kinds []StepKind
		want  Condition
		steps int // more than kinds where it closes by itself
	}{
		{"seen while it signals", []StepKind{StepOpened, StepWorsened, StepAcknowledged}, Acknowledged, 3},
		{"returned, then seen", []StepKind{StepOpened, StepReturned, StepAcknowledged}, Closed, 4},
		{"seen, then returned", []StepKind{StepOpened, StepAcknowledged, StepWorsened, StepReturned}, Closed, 5},
		{"returned, nobody looked", []StepKind{StepOpened, StepReturned, StepNote}, Returned, 3},
		{"closed by hand", []StepKind{StepOpened, StepClosed}, Closed, 2},
		{"withdrawn after all was done", []StepKind{StepOpened, StepAcknowledged, StepReturned, StepCorrected, StepWithdrawn}, Withdrawn, 6},
		{"marked late", []StepKind{StepOpened, StepWithdrawn, StepMarked, StepNote}, Withdrawn, 4},
	} {
		t.Run(course.name, func(t *testing.T) {
			r := &Record{ID: "a"}
			take(t, r, course.kinds...)
			if r.Condition != course.want || len(r.Steps) != course.steps {
				t.Errorf("%s after %d steps, want %s after %d", r.Condition, len(r.Steps), course.want, course.steps)
			}
			for i, s := range r.Steps {
				if s.Number != i+1 {
					t.Errorf("step %d is numbered %d", i+1, s.Number)
				}
			}
		})
	}
}

// TestEveryTransition holds each pair of condition and step against what the
// standard and the design allow.
func TestEveryTransition(t *testing.T) {
	conditions := []Condition{"", Unacknowledged, Acknowledged, Returned, Closed, Withdrawn}
	allowed := map[StepKind][]Condition{
		StepOpened:       {""},
		StepWorsened:     {Unacknowledged, Acknowledged},
		StepCorrected:    {Unacknowledged, Acknowledged, Returned, Closed},
		StepReturned:     {Unacknowledged, Acknowledged},
		StepWithdrawn:    {Unacknowledged, Acknowledged, Returned, Closed},
		StepAcknowledged: {Unacknowledged, Returned},
		StepClosed:       {Unacknowledged, Acknowledged, Returned},
		StepNote:         {Unacknowledged, Acknowledged, Returned, Closed, Withdrawn},
		StepMarked:       {Unacknowledged, Acknowledged, Returned, Closed, Withdrawn},
	}
	for kind, from := range allowed {
		for _, c := range conditions {
			r := &Record{ID: "a", Condition: c}
			_, err := r.Take(Step{Kind: kind, At: moment})
			may := false
			for _, ok := range from {
				may = may || ok == c
			}
			if may != (err == nil) {
				t.Errorf("%q in condition %q: %v", kind, c, err)
			}
			if err != nil && (!errors.Is(err, ErrNotAllowed) || r.Condition != c || len(r.Steps) != 0) {
				t.Errorf("%q in condition %q left a trace: %v, %+v", kind, c, err, r)
			}
		}
	}
}

// TestNoticesStand checks that a notice does not change when later steps are
// taken.
func TestNoticesStand(t *testing.T) {
	r := &Record{ID: "a"}
	notices, err := r.Take(Step{Kind: StepOpened, At: moment})
	if err != nil {
		t.Fatal(err)
	}
	take(t, r, StepWorsened, StepReturned)
	if n := notices[0]; n.Key != "a.1" || len(n.Record.Steps) != 1 || n.Record.Condition != Unacknowledged {
		t.Errorf("the first notice became %+v", n)
	}
}

// TestMarks checks that a mark can be changed and taken back.
func TestMarks(t *testing.T) {
	r := &Record{ID: "a"}
	take(t, r, StepOpened)
	for _, mark := range []Mark{MarkReal, MarkChance, NotMarked} {
		if _, err := r.Take(Step{Kind: StepMarked, At: moment, Mark: mark}); err != nil || r.Mark != mark {
			t.Errorf("mark is %q instead of %q: %v", r.Mark, mark, err)
		}
	}
}
