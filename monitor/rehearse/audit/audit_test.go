package audit

import (
	"strings"
	"testing"
	"time"

	"tailbell/monitor"
	"tailbell/monitor/life"
	"tailbell/monitor/rehearse"
)

var newYear = time.Date(2026, 1, 1, 0, 0, 0, 0, time.UTC)

// scenario is a ledger of two counted elements and one refused, in two slots,
// with one planted excess.
func scenario() (*rehearse.Scenario, monitor.Account, []monitor.SlotSum) {
	s := &rehearse.Scenario{
		Ledger: rehearse.Ledger{
			Entries: []rehearse.Entry{
				{Class: rehearse.Counted}, {Class: rehearse.Counted}, {Class: rehearse.Refused, Reason: "bad_events"},
			},
			Slots: []rehearse.SlotTotal{
				{Series: "a/fall", Start: newYear, Events: 2, Exposure: 20_500_000, HasEvents: true, HasExposure: true},
				{Series: "b/fall", Start: newYear, Events: 0, Exposure: 10_000_000, HasEvents: true, HasExposure: true},
			},
		},
		Planted: []rehearse.Excess{{Series: "a/fall", Direction: rehearse.Upper, From: newYear, To: newYear.AddDate(0, 1, 0), Ratio: 3}},
	}
	account := monitor.Account{Elements: 3, Counted: 2, Refused: 1, RefusedBy: map[monitor.Reason]int64{"bad_events": 1}}
	start := monitor.InstantOf(newYear)
	slots := []monitor.SlotSum{
		{Series: "a/fall", Start: start, Events: 2, Exposure: "20.5", HasEvents: true, HasExposure: true},
		{Series: "b/fall", Start: start, Events: 0, Exposure: "10", HasEvents: true, HasExposure: true},
	}
	return s, account, slots
}

func TestBalanced(t *testing.T) {
	s, account, slots := scenario()
	earlier := slots[0]
	earlier.Events = 1 // what it held before; the last one counts
	r := Compare(s, account, append([]monitor.SlotSum{earlier}, slots...), nil)
	if r.Differing != 0 || r.Slots != 2 || r.Events != 2 {
		t.Errorf("%+v", r)
	}
}

// TestDifferences breaks one thing at a time.
func TestDifferences(t *testing.T) {
	for name, spoil := range map[string]func(a *monitor.Account, slots *[]monitor.SlotSum){
		"an element in another class": func(a *monitor.Account, _ *[]monitor.SlotSum) { a.Counted, a.Repeat = 1, 1 },
		"an element lost":             func(a *monitor.Account, _ *[]monitor.SlotSum) { a.Elements = 2 },
		"another reason": func(a *monitor.Account, _ *[]monitor.SlotSum) {
			a.RefusedBy = map[monitor.Reason]int64{"bad_time": 1}
		},
		"an event too many":   func(_ *monitor.Account, s *[]monitor.SlotSum) { (*s)[0].Events = 3 },
		"a grain of exposure": func(_ *monitor.Account, s *[]monitor.SlotSum) { (*s)[1].Exposure = "10.000001" },
		"a slot lost":         func(_ *monitor.Account, s *[]monitor.SlotSum) { *s = (*s)[:1] },
		"a slot too many": func(_ *monitor.Account, s *[]monitor.SlotSum) {
			more := (*s)[0]
			more.Series = "c/fall"
			*s = append(*s, more)
		},
	} {
		t.Run(name, func(t *testing.T) {
			s, account, slots := scenario()
			spoil(&account, &slots)
			if r := Compare(s, account, slots, nil); r.Differing == 0 || len(r.Differences) == 0 {
				t.Error("not noticed")
			}
		})
	}
}

// TestFind checks which alert counts as the one that found an excess.
func TestFind(t *testing.T) {
	s, account, slots := scenario()
	record := func(opened time.Time, direction life.Direction, condition life.Condition) life.Record {
		return life.Record{
			ID: strings.ToLower(string(condition)), Series: "a/fall", Direction: direction, Condition: condition,
			Opening: life.Evidence{From: opened.AddDate(0, 0, -7), To: opened},
			Steps:   []life.Step{{At: opened}},
		}
	}
	alerts := []life.Record{
		record(newYear.AddDate(0, 0, 3), life.Lower, life.Closed),
		record(newYear.AddDate(0, 0, 5), life.Upper, life.Withdrawn),
		record(newYear.AddDate(0, 0, 20), life.Upper, life.Returned),
		record(newYear.AddDate(0, 0, 10), life.Upper, life.Acknowledged),
	}
	f := Compare(s, account, slots, alerts).Findings[0]
	if !f.Found || f.Alert != "acknowledged" || f.Delay != 10*24*time.Hour {
		t.Errorf("%+v", f)
	}
	if f := Compare(s, account, slots, alerts[:2]).Findings[0]; f.Found {
		t.Errorf("%+v", f)
	}
}
