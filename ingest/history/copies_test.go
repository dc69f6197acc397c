package history

import (
	"testing"

	"tailbell/ingest/bus"
)

// TestCopiesOfActs tells the copies that partitions have of one act from acts that
// say the same.
func TestCopiesOfActs(t *testing.T) {
	c := newCopies()
	for i, x := range []struct {
		subject, data string
		known         bool
	}{
		{"quillmere.in.0.act", "reset", false},
		{"quillmere.in.1.act", "reset", true},
		{"quillmere.in.1.act", "reset", false}, // once more
		{"quillmere.in.2.act", "reset", true},
		{"quillmere.in.0.act", "reset", true},
		{"quillmere.in.0.act", "close", false},
		{"quillmere.in.2.act", "reset", true},
		{"quillmere.in.2.act", "reset", false},
		{"quillmere.divided.1.2.act", "close", true},
		{"quillmere.in.0.obs", "1", false},
		{"quillmere.in.1.obs", "1", false}, // no act
	} {
		if got := c.known(&bus.Raw{Subject: x.subject, Data: []byte(x.data)}); got != x.known {
			t.Errorf("message %d, %q on %s: %t", i, x.data, x.subject, got)
		}
	}
}
