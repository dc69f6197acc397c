package monitor_test

import (
	"os"
	"slices"
	"strings"
	"testing"

	"tailbell/monitor/life"
)

// TestReminderKeys sees that every reminder is counted from when the alert came
// off the shelf, goes to the outlet that the set-up names, and keeps its key when
// the engine is restored after every message.
func TestReminderKeys(t *testing.T) {
	text, err := os.ReadFile("../testdata/monitor/shelf.txt")
	if err != nil {
		t.Fatal(err)
	}
	input, _, _ := strings.Cut(string(text), "----\n")
	for _, restart := range []int{0, 1} {
		var keys []string
		for _, n := range play(t, readScenario(t, input), restart).store.Steps {
			if n.Step.Kind == life.StepReminder {
				keys = append(keys, n.Key+" to "+n.To)
			}
		}
		// The second and the third fell due on the way of the first.
		if want := []string{"odwq5dqkxz.6.r1 to lead", "odwq5dqkxz.6.r4 to lead"}; !slices.Equal(keys, want) {
			t.Errorf("restarted every %d messages: %q, want %q", restart, keys, want)
		}
	}
}
