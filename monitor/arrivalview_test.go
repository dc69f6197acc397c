package monitor

import (
	"fmt"
	"math"
	"testing"
	"time"

	"tailbell/config"
	"tailbell/exact"
)

// TestArrivalViews shows a series that is looked at when events come, and only
// then: at a glance, over time, and as evidence.
func TestArrivalViews(t *testing.T) {
	setup, err := config.Parse(fmt.Appendf(nil, arrivalSetup, "1d", "0s", 0.02, 0.1), "set-up")
	if err != nil {
		t.Fatal(err)
	}
	e := New(Partition{Of: 1, KeyParts: 1})
	var told []View
	e.OnLook(func(v View) { told = append(told, v) })
	e.Apply(&Message{Kind: SettingMessage, Position: 1, Setting: Setting{Setup: setup}})
	start := InstantOf(time.Date(2026, 5, 1, 12, 0, 0, 0, time.UTC))
	for i, hours := range []int64{0, 130, 140, 150} {
		at := start + Instant(hours*hour)
		o := Observation{Series: "a/b", Start: at, End: at, Instant: true, Events: 1, HasEvents: true}
		e.Apply(&Message{Kind: Observations, Position: uint64(i + 2), HasTime: true, Time: at, Items: []Item{{Observation: o}}})
	}
	last := (start + Instant(150*hour)).Time()
	views := e.Views("a/b", "5d", start.Time(), last.Add(time.Hour))
	if len(views) != 3 { // at the first event the window was filling
		t.Fatalf("%d looks: %+v", len(views), views)
	}
	v := views[2]
	p := exact.Poisson{Rate: 0.1, Exposure: 5}.Upper(3)
	if !v.Arrival || !v.Made || !v.End.Equal(last) || !v.Start.Equal(last.Add(-120*time.Hour)) || v.Events != 3 ||
		math.Abs(v.Upper.P-p) > 1e-15 || !v.Upper.Signals || v.Upper.Critical != 3 || v.Lower.Watched || math.Abs(v.Expected-0.5) > 1e-12 {
		t.Errorf("the last look: %+v, want p %v", v, p)
	}
	if views[1].Upper.Signals || views[1].Events != 2 {
		t.Errorf("the look before: %+v", views[1])
	}
	if n := len(e.Latest("a/b", "2d", last.Add(time.Hour), 10)); n != 3 {
		t.Errorf("the latest looks over 2d are %d", n)
	}
	if len(told) != 6 || !told[5].Arrival || told[5].Upper.P != v.Upper.P {
		t.Errorf("%d looks were told: %+v", len(told), told)
	}
	g, ok := e.GlanceOf("a/b")
	if !ok || !g.Signals || g.Look.Events != 3 || g.Log10P != g.Look.Upper.Log10P {
		t.Errorf("at a glance: %+v", g)
	}
	ev, ok := e.Standing("a/b", "5d")
	if !ok || ev.Events != 3 || ev.Wait == nil || ev.Wait.Events != 3 || !ev.Chosen {
		t.Errorf("it stands at %+v, waited %+v", ev, ev.Wait)
	}
	e.Apply(&Message{Kind: Tick, Position: 9, HasTime: true, Time: start + Instant(30*day)})
	if g, _ = e.GlanceOf("a/b"); g.Signals || g.Look.Events != 0 || len(g.Conditions) > 0 {
		t.Errorf("much later: %+v", g)
	}
	if ev, ok = e.Standing("a/b", "5d"); !ok || ev.Events != 0 || ev.Wait != nil || ev.Chosen {
		t.Errorf("it then stands at %+v", ev)
	}
}
