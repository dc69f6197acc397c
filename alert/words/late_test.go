package words

import (
	"strings"
	"testing"

	"tailbell/monitor/life"
)

// TestOpenedLate has an alert whose look was due on 16 February opened on 4
// April: later sentences and lists give the later date, and name the look.
func TestOpenedLate(t *testing.T) {
	r := ward(t)
	zone := r.Zone
	r.Late, r.Opened = true, at(t, zone, "2025-02-16 00:00")
	r.Opening.From, r.Opening.To, r.Opening.Due = at(t, zone, "2025-01-19 00:00"), r.Opened, r.Opened
	r.Worst = r.Opening
	step(&r, 1, life.StepOpened, at(t, zone, "2025-04-04 08:30").UTC(), life.Unacknowledged)
	if got := Opened(&r); got != "2025-04-04 08:30 CEST" {
		t.Errorf("in a list: %s", got)
	}
	const want = "pened late on 4 April 2025, for the look due on 16 February 2025"
	for kind, c := range map[life.StepKind]life.Condition{
		life.StepAcknowledged: life.Acknowledged, life.StepReturned: life.Returned, life.StepWorsened: life.Unacknowledged,
		life.StepReminder: life.Unacknowledged, life.StepNote: life.Unacknowledged, life.StepShelved: life.Shelved,
	} {
		late := r
		n := step(&late, 2, kind, at(t, zone, "2025-04-10 00:00"), c)
		text := strings.Join(Paragraphs(&n), " ")
		if !strings.Contains(text, want) {
			t.Errorf("%s: %s", kind, text)
		}
	}
	n := step(&r, 2, life.StepWithdrawn, at(t, zone, "2025-04-10 00:00"), life.Withdrawn)
	if text := strings.Join(Paragraphs(&n), " "); !strings.Contains(text, "the look due on 16 February 2025 gives no signal") {
		t.Errorf("withdrawn: %s", text)
	}
}
