package allowance

import (
	"math"
	"slices"
	"testing"
	"time"

	"tailbell/config"
)

// TestFor holds what is taken from a set-up: law, windows, tails, cycle, slow
// reports, the year's allowance.
func TestFor(t *testing.T) {
	in := config.Indicator{
		Every: config.Every{N: 1, Unit: config.Day}, SlotLooks: true, Upper: true, Lower: true, Alpha: 0.1, Settle: 24 * time.Hour,
		Windows: []config.Window{{Name: "28d", Slots: 28, Step: 7}}, Allowance: &config.Allowance{Alerts: 1, Every: config.Every{N: 5, Unit: config.Year}, Assurance: 0.9},
	}
	b := config.Baseline{Kind: config.Reference, Events: 36, Exposure: config.Decimal{Coef: 200005, Digits: 1}, Margin: 1, Spread: 1}
	p, err := For(&in, &b, 0, 0, 22, 0.1)
	if err != nil {
		t.Fatal(err)
	}
	want := Law{Estimated: true, Events: 36, Exposure: 20000.5, Margin: 1, Spread: 1}
	if p.Law != want || !slices.Equal(p.Windows, []Window{{Slots: 28, Step: 7, Slot: true}}) || p.Exposure != 22 || p.Vary != 0.1 || !p.Upper || !p.Lower {
		t.Errorf("%+v", p)
	}
	if p.PerYear != 0.2 || p.Starts != 0.2 || p.Assurance != 0.9 || p.Level != 0.1 || p.SlotsPerYear != 365.2425 {
		t.Errorf("%+v", p)
	}
	b = config.Baseline{
		Kind: config.Trailing, Margin: 1, Spread: 1, Strata: &config.Strata{By: config.ByWeekday, Factors: []float64{1, 2, 3, 4, 5, 6, 7}},
		Delay: &config.Delay{Ages: []time.Duration{0, 48 * time.Hour, 96 * time.Hour}, Reported: []float64{0.3, 0.8, 1}},
	}
	if p, err = For(&in, &b, 7, 900, 22, 0); err != nil || p.Law.Events != 7 || p.Law.Exposure != 900 {
		t.Errorf("%+v, %v", p, err)
	}
	if !slices.Equal(p.Cycle, []float64{1, 2, 3, 4, 5, 6, 7}) || !slices.Equal(p.Known, []float64{0.3, 0.8, 0.8}) {
		t.Errorf("cycle %v, known %v", p.Cycle, p.Known)
	}
	if err := p.Check(); err != nil {
		t.Error(err)
	}
}

// TestLongCycle: of a cycle of very many slots the range is planned for.
func TestLongCycle(t *testing.T) {
	factors := make([]float64, 168)
	for i := range factors {
		factors[i] = 1 + float64(i%24)/23
	}
	in := config.Indicator{Every: config.Every{N: 1, Unit: config.Minute}, SlotLooks: true, Upper: true, Windows: []config.Window{{Slots: 60, Step: 1}}}
	b := config.Baseline{Kind: config.Known, Rate: 0.01, Strata: &config.Strata{By: config.ByHourOfWeek, Factors: factors}}
	p, err := For(&in, &b, 0, 0, 10, 0.1)
	if err != nil || p.Cycle != nil || math.Abs(p.Exposure*(1+p.Vary)-10*2*1.1) > 1e-9 || p.Exposure*(1-p.Vary) > 10*0.9+1e-9 {
		t.Errorf("%v to %v of %+v: %v", p.Exposure*(1-p.Vary), p.Exposure*(1+p.Vary), p, err)
	}
	in.Every = config.Every{N: 1, Unit: config.Hour}
	if p, err = For(&in, &b, 0, 0, 10, 0.1); err != nil || !slices.Equal(p.Cycle, factors) {
		t.Errorf("hourly: %v, %v", p.Cycle, err)
	}
}
