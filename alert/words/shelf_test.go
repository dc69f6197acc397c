package words

import (
	"strings"
	"testing"
	"time"

	"tailbell/monitor/life"
)

// shelfLife is an alert that is acknowledged, shelved, comes back twice, and is
// reminded of.
func shelfLife(t *testing.T) []life.Notice {
	t.Helper()
	r := ward(t)
	r.Worst, r.Condition, r.Steps = r.Opening, "", nil
	r.Worst.Provisional = 3
	var notices []life.Notice
	take := func(s life.Step) {
		took, err := r.Take(s)
		if err != nil {
			t.Fatal(err)
		}
		notices = append(notices, took...)
	}
	until, later := at(t, r.Zone, "2026-03-16 08:00"), at(t, r.Zone, "2026-03-20 00:00")
	take(life.Step{Kind: life.StepOpened, At: r.Opened, Evidence: &r.Opening})
	notices = append(notices, r.Reminder(1, r.Opened.Add(4*time.Hour), "lead"), r.Reminder(13, r.Opened.Add(52*time.Hour), "lead"))
	take(life.Step{Kind: life.StepAcknowledged, At: r.Opened.Add(53 * time.Hour), By: "B. Ostrander"})
	take(life.Step{Kind: life.StepShelved, At: r.Opened.Add(54 * time.Hour), By: "B. Ostrander", Why: "typing\x07 is awaited", Until: &until})
	take(life.Step{Kind: life.StepUnshelved, At: until, Why: "the time is over"})
	take(life.Step{Kind: life.StepShelved, At: until.Add(time.Hour), By: "M. Quell", Why: "until the round", Until: &later})
	take(life.Step{Kind: life.StepReturned, At: until.Add(2 * time.Hour)})
	take(life.Step{Kind: life.StepUnshelved, At: until.Add(3 * time.Hour), By: "M. Quell"})
	return notices
}

func TestShelf(t *testing.T) {
	var b strings.Builder
	for _, n := range shelfLife(t) {
		b.WriteString(Notice(&n, 100) + "  " + Subject(&n) + "\n  " + Line(&n) + "\n\n")
	}
	last := shelfLife(t)
	b.WriteString(Record(&last[len(last)-2].Record, 100))
	golden(t, "shelf.txt", b.String())
}

// TestTogether tells several alerts of one indicator as a table.
func TestTogether(t *testing.T) {
	var notices []*life.Notice
	for _, unit := range []string{"ward-3", "intensive-care-unit", "ward-11"} {
		r := ward(t)
		r.Series = "quillmere-east/" + unit + "/line-infection"
		r.ID = "k3v9" + unit
		n := step(&r, 1, life.StepOpened, r.Opened, life.Unacknowledged)
		notices = append(notices, &n)
	}
	text := SubjectTogether(notices) + "\n\n" + Together(notices, 100)
	for _, f := range Facts(notices[0]) {
		text += f.Name + ": " + f.Value + "\n"
	}
	golden(t, "together.txt", text)
}

// TestShelfKeepsOutControls sees that no reason brings a control character.
func TestShelfKeepsOutControls(t *testing.T) {
	for _, n := range shelfLife(t) {
		if strings.ContainsAny(Notice(&n, 80)+Subject(&n)+Line(&n)+Record(&n.Record, 80), "\x07\x1b\r") {
			t.Errorf("step %s", n.Key)
		}
	}
}

func TestElapsed(t *testing.T) {
	for d, want := range map[time.Duration]string{
		4 * time.Hour: "4 hours", 54 * time.Hour: "2 days 6 hours", time.Minute: "1 minute", 90 * time.Second: "1 minute 30 seconds",
		24*time.Hour + time.Minute: "1 day",
	} {
		if got := Elapsed(d); got != want {
			t.Errorf("%s: %q, want %q", d, got, want)
		}
	}
}
