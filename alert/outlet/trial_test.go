package outlet_test

import (
	"strings"
	"testing"
	"time"

	"tailbell/alert/outlet"
	"tailbell/alert/words"
)

// TestTrialHoldsNothingUnset sees that a trial carries the caution and no time
// that was never set.
func TestTrialHoldsNothingUnset(t *testing.T) {
	n := outlet.Trial("bell", "Europe/Berlin", time.Date(2026, 3, 1, 0, 0, 0, 0, time.UTC))
	data, err := outlet.CloudEvent("quillmere", n)
	if err != nil || strings.Contains(string(data), "0001-01-01") || n.Record.Caution != words.Caution {
		t.Errorf("%v: %s", err, data)
	}
}
