package divide

import (
	"slices"
	"testing"

	"tailbell/config"
	"tailbell/monitor"
)

// TestTotalsAreNoEvents counts readings of a counter beside events: their totals
// are compared, and not taken for events.
func TestTotalsAreNoEvents(t *testing.T) {
	of := func(totals ...int64) *Tally {
		tally := NewTally()
		for i, n := range totals {
			tally.item(&monitor.Item{Observation: monitor.Observation{
				Series: "ferrybill/host-1/restart", Start: monitor.Instant(i), End: monitor.Instant(i), Instant: true,
				Events: n, HasEvents: true, Exposure: config.Decimal{Coef: 5}, HasExposure: true, Reading: true,
			}})
		}
		tally.item(&monitor.Item{Observation: monitor.Observation{Series: "ferrybill/host-1/restart", End: 1, Events: 2, HasEvents: true}})
		return tally
	}
	a := of(100, 140)
	s := a.Series["ferrybill/host-1/restart"]
	if a.Elements != 3 || a.Events != 2 || a.Readings != 2 || s.Events != 2 || s.Readings != 2 || s.Totals() != "240" {
		t.Errorf("%+v, %+v", a, s)
	}
	if d := a.Differences(of(100, 140)); len(d) > 0 {
		t.Errorf("equal accounts differ: %q", d)
	}
	const want = "ferrybill/host-1/restart: 3 elements, 2 of them readings of counters whose totals add up to 240, with 2 events; exposure and its totals add up to 10 before, " +
		"3 elements, 2 of them readings of counters whose totals add up to 241, with 2 events; exposure and its totals add up to 10 after"
	if d := a.Differences(of(100, 141)); !slices.Equal(d, []string{want}) {
		t.Errorf("%q", d)
	}
}
