package main

import (
	"strings"
	"testing"
	"time"

	"tailbell/config"
	"tailbell/monitor"
)

// TestSeriesOverdue asks a daemon of which nobody is overdue, and lists silences
// among other conditions, the longest first.
func TestSeriesOverdue(t *testing.T) {
	setup := wardSetup(t)
	startDaemon(t, setup)
	says(t, 0, []string{"Nobody is overdue"}, "series", "overdue", "--config", setup)
	at := time.Date(2026, 3, 1, 8, 0, 0, 0, time.UTC)
	rows := overdue(&statusReply{Partitions: []partStatus{
		{Conditions: []conditionRow{{Series: "b", Kind: monitor.Silent, Since: at, Text: "x"}, {Series: "c", Kind: monitor.WithheldLooks}}},
		{Conditions: []conditionRow{{Series: "a", Kind: monitor.Silent, Since: at.Add(-time.Hour), Text: "y"}}},
	}})
	var b strings.Builder
	if err := writeOverdue(&b, &config.Setup{}, rows); err != nil {
		t.Fatal(err)
	}
	if len(rows) != 2 || rows[0].Series != "a" || !strings.HasSuffix(b.String(), "2 series are overdue. That nothing was reported is no count of zero.\n") {
		t.Errorf("%+v\n%s", rows, b.String())
	}
}
