package words

import (
	"strings"
	"testing"

	"tailbell/monitor/life"
)

// TestClosedEarly sees that only a person who closes what still signals is told
// what that means.
func TestClosedEarly(t *testing.T) {
	opened := life.Step{Number: 1, Kind: life.StepOpened, At: at(t, "Europe/Berlin", "2026-03-04 00:00"), Condition: life.Unacknowledged}
	returned := life.Step{Number: 2, Kind: life.StepReturned, At: at(t, "Europe/Berlin", "2026-03-20 00:00"), Condition: life.Returned}
	for _, c := range []struct {
		name, by, says string
		steps          []life.Step
		heard          *life.Heard
	}{
		{"signalling", "B. Ostrander", "no other alert of the series opens in this direction", []life.Step{opened}, nil},
		{"silent", "B. Ostrander", "before it is heard of again", []life.Step{opened}, &life.Heard{Within: "20d"}},
		{"returned", "B. Ostrander", "", []life.Step{opened, returned}, nil},
		{"by itself", "", "", []life.Step{opened}, nil},
	} {
		n := life.Notice{
			Step:   life.Step{Number: len(c.steps) + 1, Kind: life.StepClosed, At: returned.At, By: c.by, Why: "a register error", Condition: life.Closed},
			Record: life.Record{ID: "k3v9-1", Series: "quillmere-east/ward-3/fall", Direction: life.Upper, Zone: "Europe/Berlin", Silence: c.heard},
		}
		n.Record.Steps = append(c.steps, n.Step)
		got := strings.Join(Paragraphs(&n), " ")
		if c.says != "" && !strings.Contains(got, c.says) || c.says == "" && strings.Contains(got, "no other alert") {
			t.Errorf("%s: %s", c.name, got)
		}
	}
}
