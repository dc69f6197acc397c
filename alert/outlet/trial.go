package outlet

import (
	"fmt"
	"time"

	"tailbell/alert/words"
	"tailbell/monitor/life"
)

// Trial returns the notice by which a way out is tried. It says that it is none
// of an alert, in its kind and in its words.
func Trial(outlet, zone string, now time.Time) *life.Notice {
	now = now.UTC().Truncate(time.Microsecond)
	key := fmt.Sprintf("test-%s.%d", now.Format("20060102t150405.000000"), 1)
	return &life.Notice{
		Key: key,
		Step: life.Step{Number: 1, Kind: life.StepTest, At: now, Why: "This is a test of the outlet " + outlet +
			": nothing was counted, and nothing rings. Whoever reads it can say that what Tailbell tells gets here."},
		Record: life.Record{
			ID: key[:len(key)-2], Series: "test", Indicator: "test", Title: "Test", Direction: "test", Zone: zone, Opened: now,
			Steps: []life.Step{}, Caution: words.Caution,
		},
	}
}
