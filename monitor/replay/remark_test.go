package replay

import (
	"fmt"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"tailbell/config"
	"tailbell/monitor"
)

func TestInspect(t *testing.T) {
	setup := parse(t, 1000)
	berlin := setup.Indicators[0].Zone
	tape := &Tape{}
	line := 1
	add := func(series string, day, days int, o monitor.Observation) {
		line++
		start := time.Date(2024, 3, 20+day, 0, 0, 0, 0, berlin)
		o.Series, o.Start, o.End = series, monitor.InstantOf(start), monitor.InstantOf(start.AddDate(0, 0, days))
		tape.Add(&o, o.End, false, false, Place{"h.csv", line})
	}
	both := func(events int64, beds uint64) monitor.Observation {
		return monitor.Observation{Events: events, HasEvents: true, Exposure: config.Decimal{Coef: beds}, HasExposure: true}
	}
	const ward = "site/ward/falls"
	add(ward, 0, 1, both(0, 20))
	add(ward, 1, 1, both(1, 20))
	add(ward, 4, 1, both(0, 20)) // lacks two days
	add(ward, 1, 1, both(1, 20)) // a second time, and out of order
	add(ward, 5, 1, monitor.Observation{Events: 1, HasEvents: true})
	add(ward, 3, 1, both(0, 20)) // fills one of the two
	add(ward, 6, 1, monitor.Observation{Exposure: config.Decimal{Coef: 20}, HasExposure: true})
	add(ward, 5, 2, monitor.Observation{Exposure: config.Decimal{Coef: 41}, HasExposure: true})
	add("site/ward/nobody", 3, 1, both(0, 20))
	add(ward, 13, 1, both(2, 20)) // over the day of 23 hours
	revised := both(3, 20)
	revised.ID, revised.Revision = "x", 1
	add("site/other/falls", 0, 1, revised)
	revised.Revision = 2
	add("site/other/falls", 0, 1, revised)
	revised.Events = 9
	add("site/other/falls", 0, 1, revised)
	tape.Sort()
	var got []string
	for _, r := range Inspect(setup, tape).List {
		got = append(got, fmt.Sprint(r))
	}
	want := []string{
		"h.csv:4: gap: site/ward/falls: no events for the slot of 1d from 2024-03-22: absent is not zero, and looks that need it are withheld",
		"h.csv:4: gap: site/ward/falls: no exposure for the slot of 1d from 2024-03-22: absent is not zero, and looks that need it are withheld",
		"h.csv:5: out_of_order: h.csv:4 became known later: the rows are put in order",
		"h.csv:5: duplicate: h.csv:3 says the same of the same time; both count: give corrections an id and a revision",
		"h.csv:7: out_of_order: h.csv:6 became known later: the rows are put in order",
		"h.csv:10: out_of_order: h.csv:9 became known later: the rows are put in order",
		"h.csv:11: gap: site/ward/falls: no events for 7 slots of 1d, from 2024-03-26 until 2024-04-02: absent is not zero, and looks that need it are withheld",
		"h.csv:11: gap: site/ward/falls: no exposure for 6 slots of 1d, from 2024-03-27 until 2024-04-02: absent is not zero, and looks that need it are withheld",
		"h.csv:12: out_of_order: h.csv:11 became known later: the rows are put in order",
		"h.csv:13: out_of_order: h.csv:11 became known later: the rows are put in order",
		"h.csv:14: out_of_order: h.csv:11 became known later: the rows are put in order",
		"h.csv:14: duplicate: h.csv:13 says something else of the same time; they have one id, and count once",
	}
	if diff := cmp.Diff(want, got); diff != "" {
		t.Error(diff)
	}
}

func TestPlaceOfRow(t *testing.T) {
	tape := &Tape{}
	for i := range 40_000 { // more than one piece
		at := monitor.Instant((i * 7919) % 40_000)
		tape.Add(&monitor.Observation{Series: "a", Start: at, End: at + 1, Events: int64(i), HasEvents: true}, at, false, false, Place{fmt.Sprint(i / 20_000), i})
	}
	tape.Sort()
	last := monitor.Instant(-1)
	for m := range tape.Messages() {
		o := &m.Items[0].Observation
		if m.Time < last || o.Start != m.Time {
			t.Fatalf("%d comes after %d", m.Time, last)
		}
		last = m.Time
		if p, ok := tape.Place(m.Position); !ok || p.Line != int(o.Events) || p.File != fmt.Sprint(o.Events/20_000) {
			t.Fatalf("row %d stands at %v", o.Events, p)
		}
	}
}
