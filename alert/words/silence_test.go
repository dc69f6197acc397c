package words

import (
	"strings"
	"testing"
	"time"

	"tailbell/monitor/life"
)

// TestSilence checks that a silence is told without counts and p-values,
// whatever happens to it.
func TestSilence(t *testing.T) {
	at := time.Date(2026, 3, 5, 8, 0, 0, 0, time.UTC)
	last, until := at.Add(-36*time.Hour), at.Add(24*time.Hour)
	for _, c := range []struct {
		heard *time.Time
		steps []life.Step
		want  string
	}{
		{&last, []life.Step{{Kind: life.StepOpened}}, "nothing has been reported since 21:00 CET on 3 March 2026; something is expected within 36h."},
		{nil, []life.Step{{Kind: life.StepOpened}}, "nothing was ever reported; something is expected within 36h."},
		{&last, []life.Step{{Kind: life.StepOpened}, {Kind: life.StepReturned}}, "heard of again, after a silence that was told of at 09:00 CET on 5 March 2026. Nobody has acknowledged it yet."},
		{&last, []life.Step{{Kind: life.StepOpened}, {Kind: life.StepAcknowledged, By: "A. Nurse", Why: "machine off"}}, "silence: acknowledged by A. Nurse: \u201cmachine off\u201d."},
		{&last, []life.Step{{Kind: life.StepOpened}, {Kind: life.StepShelved, By: "A. Nurse", Until: &until}}, "silence: shelved by A. Nurse until 09:00 CET on 6 March 2026."},
		{&last, []life.Step{{Kind: life.StepOpened}, {Kind: life.StepShelved, Until: &until}, {Kind: life.StepUnshelved}}, "It is off the shelf, and waits"},
		{&last, []life.Step{{Kind: life.StepOpened}, {Kind: life.StepMarked, Mark: life.MarkData, By: "A. Nurse"}}, "silence: marked as data error by A. Nurse."},
	} {
		r := &life.Record{
			ID: "a", Indicator: "fall", Title: "Falls", Series: "quillmere-east/ward-3/fall", Direction: life.Silence, Zone: "Europe/Berlin",
			Opened: at, Silence: &life.Heard{Last: c.heard, Within: "36h"}, Caution: "Nothing reported.",
		}
		var n life.Notice
		for _, s := range c.steps {
			s.At = at
			notices, err := r.Take(s)
			if err != nil {
				t.Fatal(err)
			}
			n = notices[0]
		}
		for what, text := range map[string]string{
			"paragraphs": strings.Join(Paragraphs(&n), " "), "line": Line(&n), "record": Record(r, 200), "subject": Subject(&n), "notice": Notice(&n, 80),
		} {
			if what == "paragraphs" && !strings.Contains(text, c.want) {
				t.Errorf("%v: got %s", c.steps, text)
			}
			if strings.Contains(text, "p = ") || strings.Contains(text, "usual") || strings.Contains(text, "events") || !strings.Contains(text, "Ward 3") && what != "record" {
				t.Errorf("%v, %s: %s", c.steps, what, text)
			}
		}
		if len(Facts(&n)) > 0 {
			t.Errorf("facts of a silence: %v", Facts(&n))
		}
	}
}
