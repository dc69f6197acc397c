package monitor

import (
	"fmt"
	"math"
	"slices"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"tailbell/config"
	"tailbell/exact"
)

const viewSetup = `name = "view"
folder = "x"
[time]
mode = "history"
[[indicator]]
name = "fall"
series = ["*/fall"]
unit = "bed-days"
every = "1d"
zone = "Europe/Berlin"
events = "each"
settle = "2d"
horizon = "20d"
windows = ["3d", "7d"]
tails = ["upper", "lower"]
p_limit = 0.02
quiet = 3
[indicator.baseline]
kind = "known"
rate = 0.02
`

// viewDays reports one series for so many days: 40 bed-days each, but for one
// day that is missing, and more falls for a while.
func viewDays(t *testing.T, e *Engine, zone *time.Location) {
	t.Helper()
	s, err := config.Parse([]byte(viewSetup), "set-up")
	if err != nil {
		t.Fatal(err)
	}
	e.Apply(&Message{Kind: SettingMessage, Position: 1, Setting: Setting{Setup: s}})
	for d := range 40 {
		begin := time.Date(2026, 3, 1+d, 0, 0, 0, 0, zone)
		o := Observation{
			Series: "a/fall", Start: InstantOf(begin), End: InstantOf(begin.AddDate(0, 0, 1)),
			Events: int64(d % 2), HasEvents: true, HasExposure: d != 20, Exposure: config.Decimal{Coef: 40},
		}
		if d >= 25 && d < 30 {
			o.Events = 4
		}
		if d == 20 {
			o.Exposure = config.Decimal{}
		}
		m := Message{Kind: Observations, Position: uint64(d + 2), HasTime: true, Time: o.End, Items: []Item{{Observation: o}}}
		e.Apply(&m)
	}
}

// TestViews compares the looks as they are told when they fall due with the
// looks as they stand afterwards, with the account, with the alerts and with
// package exact.
func TestViews(t *testing.T) {
	zone, err := time.LoadLocation("Europe/Berlin")
	if err != nil {
		t.Fatal(err)
	}
	e := New(Partition{Of: 1, KeyParts: 1})
	var told []View
	e.OnLook(func(v View) { told = append(told, v) })
	viewDays(t, e, zone)
	a := e.Account()
	if got, want := int64(len(told)), a.Looks+a.WithheldLooks; got != want || a.WithheldLooks != 10 {
		t.Errorf("%d looks were told, the account has %d, of which %d were withheld", got, want, a.WithheldLooks)
	}
	signals := 0
	for i := range told {
		checkView(t, &told[i])
		if told[i].Upper.Signals {
			signals++
		}
	}
	if signals != len(e.byName["a/fall"].tails[upper].lit) || signals < 5 {
		t.Errorf("%d of the looks told signal, the engine holds %d", signals, len(e.byName["a/fall"].tails[upper].lit))
	}
	from := time.Date(2026, 3, 20, 0, 0, 0, 0, zone)
	for _, window := range []string{"3d", "7d"} {
		want := slices.DeleteFunc(slices.Clone(told), func(v View) bool { return v.Window != window || v.End.Before(from) })
		got := e.Views("a/fall", window, from, time.Date(2027, 1, 1, 0, 0, 0, 0, zone))
		if fmt.Sprintf("%+v", got) != fmt.Sprintf("%+v", want) {
			t.Errorf("looks of %s:\n got %+v\nwant %+v", window, got, want)
		}
		some := e.Views("a/fall", window, from, from.AddDate(0, 0, 2))
		if len(some) != 2 || !some[0].End.Equal(from) {
			t.Errorf("two days of %s hold %d looks", window, len(some))
		}
	}
	if e.Views("b/fall", "3d", from, from) != nil || e.Views("a/fall", "4d", from, from.AddDate(1, 0, 0)) != nil {
		t.Error("an unknown series or window has looks")
	}
}

// checkView compares a view with what package exact says to its numbers.
func checkView(t *testing.T, v *View) {
	t.Helper()
	if v.Made == math.IsNaN(v.Expected) || v.Made != (v.Status == "made") {
		t.Errorf("%s to %s: made %v, %q, expected %v", v.Window, v.End, v.Made, v.Status, v.Expected)
	}
	if !v.Made {
		if v.Status != missing.String() || !math.IsNaN(v.Upper.P) || v.Upper.Signals || v.Upper.HasCritical {
			t.Errorf("not made: %+v", v)
		}
		return
	}
	x := exact.Poisson{Rate: 0.02, Exposure: v.Exposure.Float(v.Digits)}
	if v.Expected != x.Mean() || v.Upper.P != x.Upper(v.Events) || v.Lower.P != x.Lower(v.Events) {
		t.Errorf("%+v: expected %v, p %v and %v", v, x.Mean(), x.Upper(v.Events), x.Lower(v.Events))
	}
	for _, d := range []struct {
		tail   ViewTail
		beyond bool
	}{
		{v.Upper, v.Events >= v.Upper.Critical},
		{v.Lower, v.Lower.HasCritical && v.Events <= v.Lower.Critical},
	} {
		if !d.tail.Watched || d.tail.Limit != 0.02 || d.tail.Signals != d.beyond || d.tail.Signals != (d.tail.P <= 0.02) ||
			math.Abs(d.tail.Log10P-math.Log10(d.tail.P)) > 1e-12 {
			t.Errorf("a tail of %+v is %+v", v, d.tail)
		}
	}
}

// TestViewsLeaveNoTrace holds an engine that tells its looks against one that
// does not.
func TestViewsLeaveNoTrace(t *testing.T) {
	quiet, telling := New(Partition{Of: 1, KeyParts: 1}), New(Partition{Of: 1, KeyParts: 1})
	telling.OnLook(func(View) {})
	zone, err := time.LoadLocation("Europe/Berlin")
	if err != nil {
		t.Fatal(err)
	}
	viewDays(t, quiet, zone)
	viewDays(t, telling, zone)
	telling.Views("a/fall", "3d", time.Unix(0, 0), time.Unix(4e9, 0))
	a, b := quiet.Drain(), telling.Drain()
	if diff := cmp.Diff(a, b); diff != "" || len(a.Steps) == 0 {
		t.Errorf("telling the looks changed what the engine leaves (%d steps):\n%s", len(a.Steps), diff)
	}
}
