package monitor_test

import (
	"bytes"
	"os"
	"strings"
	"testing"
	"time"
)

// TestInheritedIsArchivedOnce sees that what a series inherited goes to the archive
// with those that counted it alone, when its indicator goes.
func TestInheritedIsArchivedOnce(t *testing.T) {
	text, err := os.ReadFile("../testdata/monitor/merged-again.txt")
	if err != nil {
		t.Fatal(err)
	}
	input, _, _ := strings.Cut(string(text), "----\n")
	from := time.Date(2026, 1, 3, 0, 0, 0, 0, time.UTC)
	own := 0
	for _, slot := range play(t, readScenario(t, input), 0).store.Archive {
		switch {
		case !bytes.Contains(slot.Data, []byte("quillmere/ab/fall")):
		case slot.Start.Time().Before(from):
			t.Errorf("a slot of %s is archived twice", slot.Start.Time())
		default:
			own++
		}
	}
	if own != 1 {
		t.Errorf("%d slots of its own are archived, want 1", own)
	}
}
