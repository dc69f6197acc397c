package main

import (
	"bytes"
	"strings"
	"testing"
	"time"

	"tailbell/monitor/life"
)

// TestAlertListOfLate lists an alert that opened weeks after its look was due:
// the list says when it opened.
func TestAlertListOfLate(t *testing.T) {
	due := time.Date(2025, 2, 15, 23, 0, 0, 0, time.UTC)
	late := life.Record{
		ID: "late", Series: "quillmere-east/ward-3/fall", Zone: "Europe/Berlin", Opened: due, Late: true,
		Steps: []life.Step{{Kind: life.StepOpened, At: time.Date(2025, 4, 4, 6, 30, 0, 0, time.UTC)}},
	}
	prompt := late
	prompt.ID, prompt.Late, prompt.Steps = "prompt", false, []life.Step{{Kind: life.StepOpened, At: due}}
	var b bytes.Buffer
	if err := tabulate(&b, []life.Record{late, prompt}); err != nil {
		t.Fatal(err)
	}
	lines := strings.Split(b.String(), "\n")
	if !strings.Contains(lines[1], "2025-04-04 08:30 CEST late  ") || !strings.Contains(lines[2], "2025-02-16 00:00 CET  ") {
		t.Errorf("\n%s", b.String())
	}
}

func TestGrouped(t *testing.T) {
	for x, want := range map[float64]string{219970.4: "219,970", -1234.4: "-1,234", 999: "999", 0.0486: "0.0486", 12.34: "12.3"} {
		if got := grouped(x); got != want {
			t.Errorf("%v is %s, want %s", x, got, want)
		}
	}
}
