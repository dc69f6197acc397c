package monitor

import (
	"fmt"
	"math"
	"testing"
	"time"

	"tailbell/config"
	"tailbell/monitor/life"
)

// glanceEngine has seen three series, one of which rang.
func glanceEngine(t *testing.T) (*Engine, *time.Location) {
	t.Helper()
	zone, err := config.LoadZone("Europe/Berlin")
	if err != nil {
		t.Fatal(err)
	}
	e := New(Partition{Of: 1, KeyParts: 1})
	viewDays(t, e, zone)
	for i, name := range []string{"b/fall", "c/fall"} {
		begin := time.Date(2026, 4, 9, 0, 0, 0, 0, zone)
		e.Apply(&Message{
			Kind: Observations, Position: e.Position() + 1, HasTime: true, Time: InstantOf(begin.AddDate(0, 0, 1)),
			Items: []Item{{Observation: Observation{
				Series: name, Start: InstantOf(begin), End: InstantOf(begin.AddDate(0, 0, 1)),
				Events: int64(i), HasEvents: true, HasExposure: true, Exposure: config.Decimal{Coef: 40},
			}}},
		})
	}
	return e, zone
}

func TestGlancesComeInPiecesAndAgreeWithViews(t *testing.T) {
	e, _ := glanceEngine(t)
	var all []Glance
	calls := 0
	for next, more := 0, true; more; calls++ {
		next = e.Glances(next, 2, func(g Glance) { all = append(all, g) })
		more = next > 0
	}
	if len(all) != e.SeriesCount() || len(all) != 3 || calls != 2 {
		t.Fatalf("%d series in %d calls", len(all), calls)
	}
	g := all[0]
	want := 0.0
	var window string
	for _, w := range []string{"3d", "7d"} {
		v := e.Latest("a/fall", w, e.Clock().Time(), 1)
		if len(v) != 1 {
			t.Fatalf("%s: %d looks", w, len(v))
		}
		for _, p := range []float64{v[0].Upper.Log10P, v[0].Lower.Log10P} {
			if p < want {
				want, window = p, w
			}
		}
	}
	if g.Log10P != want || g.Look.Window != window || g.Indicator != "fall" {
		t.Errorf("%+v, want log10 p %g of %s", g, want, window)
	}
	if all[1].Look.Window != "" || all[1].Log10P != 0 {
		t.Errorf("a series without a look has %+v", all[1])
	}
}

func TestLatestLooksAreTheLastViews(t *testing.T) {
	e, zone := glanceEngine(t)
	all := e.Views("a/fall", "3d", time.Unix(0, 0), time.Date(2030, 1, 1, 0, 0, 0, 0, zone))
	for _, n := range []int{1, 5, len(all), len(all) + 9} {
		got := e.Latest("a/fall", "3d", e.Clock().Time(), n)
		want := all[max(len(all)-n, 0):]
		if fmt.Sprint(got) != fmt.Sprint(want) {
			t.Errorf("%d: %v, want %v", n, got, want)
		}
	}
	until := all[3].End
	if got := e.Latest("a/fall", "3d", until, 2); len(got) != 2 || !got[1].End.Equal(until) {
		t.Errorf("until %s: %v", until, got)
	}
	for _, got := range [][]View{e.Latest("x", "3d", until, 2), e.Latest("a/fall", "9d", until, 2), e.Latest("a/fall", "3d", until, 0)} {
		if got != nil {
			t.Error(got)
		}
	}
}

func TestStandingIsTheLatestLook(t *testing.T) {
	e, _ := glanceEngine(t)
	v := e.Latest("a/fall", "7d", e.Clock().Time(), 1)[0]
	ev, ok := e.Standing("a/fall", "7d")
	if !ok || ev.Events != v.Events || ev.Exposure != v.Decimal() || !ev.To.Equal(v.End) || math.Abs(ev.Expected-v.Expected) > 1e-12 {
		t.Errorf("%v %+v, want %+v", ok, ev, v)
	}
	if ev.Baseline.Kind != "known" || ev.RateUpper <= ev.Rate || ev.Recompute == "" {
		t.Errorf("%+v", ev)
	}
	if _, ok := e.Standing("b/fall", "7d"); ok {
		t.Error("a series without a look has evidence")
	}
}

func TestSlotsOfSayWhatIsAbsent(t *testing.T) {
	e, zone := glanceEngine(t)
	slots := e.SlotsOf("a/fall", 22)
	if len(slots) != 22 || slots[0].Settled || !slots[21].Settled {
		t.Fatalf("%d slots, %+v", len(slots), slots)
	}
	found := false
	for _, s := range slots {
		if s.Start.Equal(time.Date(2026, 3, 21, 0, 0, 0, 0, zone)) {
			found = true
			if s.HasExposure || !s.HasEvents {
				t.Errorf("%+v", s)
			}
		}
	}
	if !found {
		t.Error("the slot without exposure is not shown")
	}
	var open life.Record
	for _, r := range e.Alerts() {
		open = r
	}
	if open.ID == "" {
		t.Error("the scenario rang no alert")
	}
}
