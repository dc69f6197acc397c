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
		{"shelved and back", []StepKind{StepOpened, StepAcknowledged, StepShelved, StepWorsened, StepUnshelved}, Unacknowledged, 5},
		{"acknowledged again after the shelf", []StepKind{
			StepOpened, StepAcknowledged, StepShelved, StepUnshelved, StepAcknowledged, StepReturned,
		}, Closed, 7},
		{"returned on the shelf, nobody looked", []StepKind{StepOpened, StepShelved, StepReturned, StepUnshelved}, Returned, 4},
		{"returned on the shelf, seen before", []StepKind{StepOpened, StepAcknowledged, StepShelved, StepReturned, StepUnshelved}, Closed, 6},
		{"not acknowledged since the shelf", []StepKind{
			StepOpened, StepAcknowledged, StepShelved, StepUnshelved, StepReturned,
		}, Returned, 5},
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
	conditions := []Condition{"", Unacknowledged, Acknowledged, Returned, Shelved, Closed, Withdrawn}
	allowed := map[StepKind][]Condition{
		StepOpened:       {""},
		StepWorsened:     {Unacknowledged, Acknowledged, Shelved},
		StepCorrected:    {Unacknowledged, Acknowledged, Returned, Shelved, Closed},
		StepReturned:     {Unacknowledged, Acknowledged, Shelved},
		StepWithdrawn:    {Unacknowledged, Acknowledged, Returned, Shelved, Closed},
		StepAcknowledged: {Unacknowledged, Returned},
		StepClosed:       {Unacknowledged, Acknowledged, Returned, Shelved},
		StepNote:         {Unacknowledged, Acknowledged, Returned, Shelved, Closed, Withdrawn},
		StepMarked:       {Unacknowledged, Acknowledged, Returned, Shelved, Closed, Withdrawn},
		StepShelved:      {Unacknowledged, Acknowledged, Shelved},
		StepUnshelved:    {Shelved},
		StepReminder:     {},
		StepTest:         {},
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

// TestShelf follows who put an alert aside until when, and what people are not
// told meanwhile.
func TestShelf(t *testing.T) {
	r := &Record{ID: "a"}
	take(t, r, StepOpened)
	until := moment.Add(48 * time.Hour)
	shelved, err := r.Take(Step{Kind: StepShelved, At: moment, By: "A. Nurse", Why: "round", Until: &until})
	if err != nil {
		t.Fatal(err)
	}
	if r.Shelf == nil || !r.Shelf.Until.Equal(until) || r.Shelf.By != "A. Nurse" || r.Shelf.Why != "round" || shelved[0].Quiet() {
		t.Errorf("the shelf is %+v, quiet %v", r.Shelf, shelved[0].Quiet())
	}
	note, err := r.Take(Step{Kind: StepNote, At: moment})
	if err != nil || !note[0].Quiet() {
		t.Errorf("a note on the shelf: %v, quiet %v", err, note[0].Quiet())
	}
	back, err := r.Take(Step{Kind: StepUnshelved, At: until})
	if err != nil || r.Shelf != nil || back[0].Quiet() || shelved[0].Record.Shelf == nil {
		t.Errorf("back: %v, %+v, quiet %v", err, r.Shelf, back[0].Quiet())
	}
}

// TestReminders checks that a reminder leaves the record as it is, and that no
// two have the same key.
func TestReminders(t *testing.T) {
	r := &Record{ID: "a"}
	take(t, r, StepOpened)
	since, ok := r.Unheeded()
	first, second := r.Reminder(1, moment, "lead"), r.Reminder(2, moment, "lead")
	if !ok || !since.Equal(moment) || len(r.Steps) != 1 || first.Key != "a.1.r1" || second.Key != "a.1.r2" || first.To != "lead" {
		t.Errorf("%v %v, %d steps, keys %s, %s", since, ok, len(r.Steps), first.Key, second.Key)
	}
	take(t, r, StepShelved, StepUnshelved)
	if n := r.Reminder(1, moment, ""); n.Key != "a.3.r1" {
		t.Errorf("after the shelf the key is %s", n.Key)
	}
	take(t, r, StepAcknowledged)
	if _, ok := r.Unheeded(); ok {
		t.Error("acknowledged, and still unheeded")
	}
}
