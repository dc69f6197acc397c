package monitor

import (
	"fmt"
	"math"
	"testing"
	"time"

	"tailbell/config"
)

// TestTrialViews shows a series whose last trials are looked at: how many looks
// there are does not depend on how long ago they were made.
func TestTrialViews(t *testing.T) {
	setup, err := config.Parse(fmt.Appendf(nil, trialsSetup, "1d", "0s", "", "", 0.02, 0.1), "set-up")
	if err != nil {
		t.Fatal(err)
	}
	e := New(Partition{Of: 1, KeyParts: 1})
	e.Apply(&Message{Kind: SettingMessage, Position: 1, Setting: Setting{Setup: setup}})
	start := InstantOf(time.Date(2026, 5, 1, 12, 0, 0, 0, time.UTC))
	tell := func(days, events, trials int64) {
		at := start + Instant(days*day)
		o := Observation{
			Series: "a/b", Start: at, End: at, Instant: true, Events: events, HasEvents: true,
			Exposure: config.Decimal{Coef: uint64(trials)}, HasExposure: true,
		}
		e.Apply(&Message{Kind: Observations, Position: uint64(days + 2), HasTime: true, Time: at, Items: []Item{{Observation: o}}})
	}
	for d := range int64(5) {
		tell(d, 0, 1)
	}
	tell(5, 1, 1)
	tell(9, 1, 1)
	tell(17, 2, 3)
	last := (start + Instant(17*day)).Time()
	views := e.Latest("a/b", "5 trials", last.Add(time.Hour), 3)
	if len(views) != 3 {
		t.Fatalf("%d looks: %+v", len(views), views)
	}
	v := views[2] // the days 5, 9 and 17
	p := binomialTail(5, 4, 0.1)
	if !v.Arrival || !v.Made || !v.End.Equal(last) || !v.Start.Equal((start + Instant(5*day)).Time()) || v.Events != 4 || v.Decimal() != "5" ||
		math.Abs(v.Upper.P-p) > 1e-15 || !v.Upper.Signals || v.Upper.Critical != 3 || v.Lower.Watched || math.Abs(v.Expected-0.5) > 1e-12 {
		t.Errorf("the last look: %+v, want p %v", v, p)
	}
	if views[0].Events != 1 || views[0].Upper.Signals || views[1].Events != 2 {
		t.Errorf("the looks before: %+v", views[:2])
	}
	if n := len(e.Latest("a/b", "14 trials", last, 10)); n != 0 {
		t.Errorf("%d looks over 14 trials, of which there are 10", n)
	}
	if n := len(e.Latest("a/b", "5 trials", last, 1)); n != 1 {
		t.Errorf("%d looks, 1 was asked for", n)
	}
	ev, ok := e.Standing("a/b", "5 trials")
	if !ok || ev.Events != 4 || ev.Exposure != "5" || ev.Wait == nil || ev.Wait.Events != 3 || ev.Wait.P != nil || !ev.Chosen {
		t.Errorf("it stands at %+v", ev)
	}
	if g, ok := e.GlanceOf("a/b"); !ok || !g.Signals || g.Look.Window != "5 trials" || g.Look.Events != 4 {
		t.Errorf("at a glance: %+v", g)
	}
	e.Apply(&Message{Kind: Observations, Position: 30, HasTime: true, Time: start + Instant(18*day), Items: []Item{{Observation: Observation{
		Series: "a/b", Start: start + Instant(17*day), End: start + Instant(18*day), Exposure: config.Decimal{Coef: 3}, HasExposure: true,
	}}}})
	if len(e.refused) != 1 || e.refused[0].Reason != NeedsInstant {
		t.Errorf("trials of a whole day: %+v", e.refused)
	}
}
