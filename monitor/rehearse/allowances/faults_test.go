package allowances

import (
	"testing"

	"tailbell/exact"
	"tailbell/monitor/allowance"
)

// law is a Poisson count of so many events.
func law(mean float64) exact.Poisson { return exact.Poisson{Rate: mean, Exposure: 1} }

// limited is the cell with a limit on p from some solver instead of the
// engine's own.
func limited(c Cell, alpha, told float64) *Cell {
	c.Limit, c.Told = alpha, told
	return &c
}

// solved is what the real solver says of a cell of one window and tail.
func solved(t *testing.T, c Cell, starts float64) allowance.Part {
	t.Helper()
	p, ok := c.plan()
	if !ok {
		t.Fatalf("%s has no plan", c.Name)
	}
	p.PerYear, p.Starts = (&Outcome{Cell: &c}).Allowed(), starts
	l, err := allowance.Solve(p)
	if err != nil {
		t.Fatal(err)
	}
	return l.Parts[0]
}

// caught plays the cell by the right limit, which must hold, and by the planted
// one, which must not.
func caught(t *testing.T, c Cell, right allowance.Part, alpha, told float64) {
	t.Helper()
	for _, x := range []struct {
		who   string
		c     *Cell
		wrong bool
	}{{"the solver", limited(c, right.Alpha, right.PerYear), false}, {"the fault", limited(c, alpha, told), true}} {
		o, err := x.c.Play(1, 2, 3)
		if err != nil {
			t.Fatal(err)
		}
		t.Logf("%s: p limit %.6f, says %.4f; seen %.4f ± %.4f crossings, %.4f ± %.4f alerts a year: %s",
			x.who, x.c.Limit, x.c.Told, o.Crossings().Mean, o.Crossings().Err, o.Alerts().Mean, o.Alerts().Err, o.Fault())
		if wrong := o.Fault() != ""; wrong != x.wrong {
			t.Errorf("%s, limit %v by %s: %q", c.Name, x.c.Limit, x.who, o.Fault())
		}
	}
}

// TestFaultZeroBranch plants a solver that takes the smallest count whose
// crossings fit, from 0 on: under the mean a window signals nearly always, and
// seldom crosses.
func TestFaultZeroBranch(t *testing.T) {
	c := short(upper(Cell{Name: "series of 60d: 28d, mean 2", Rate: 2. / 28, Windows: []int{28}, Allowance: "0.5 in 60d"}), 28)
	c.Series = 400
	slot, shared := law(2./28), law(2*27./28)
	allowed := (&Outcome{Cell: &c}).Allowed()
	for k := int64(0); ; k++ {
		if cost := exact.CrossingUpper(slot, shared, slot, k, k) * c.slotsPerYear(); cost <= allowed {
			caught(t, c, solved(t, c, 365.2425/60), law(2).Upper(k), cost)
			return
		}
	}
}

// TestFaultWithoutD plants a solver that forgets what becomes known of the slots
// that two looks share.
func TestFaultWithoutD(t *testing.T) {
	c := slow()[0]
	c.Series, c.Slots = 6, 365*8
	rate, known := c.Rate, c.Delay.Reported
	sum := func(from, to int) (mean float64) { // expected of the slots of these ages
		for age := from; age < to; age++ {
			mean += rate * known[min(age, len(known)-1)]
		}
		return mean
	}
	window, shared, entering, leaving := law(sum(0, 28)), law(sum(0, 27)), law(sum(0, 1)), law(rate)
	allowed := (&Outcome{Cell: &c}).Allowed()
	for k := int64(window.Mean()) + 1; ; k++ {
		if cost := exact.CrossingUpper(leaving, shared, entering, k, k) * c.slotsPerYear(); cost <= allowed {
			caught(t, c, solved(t, c, 0), window.Upper(k), cost)
			return
		}
	}
}

// TestFaultFallingCount plants a solver that counts only states from which the
// new slots bring the window up to its critical count, and forgets those that are
// past it already when that count falls.
func TestFaultFallingCount(t *testing.T) {
	c := Nights("by hour of the week: 7h, mean 3, upper", 7, true, false)
	c.Series, c.Slots = 10, 24*365
	mean := func(from, n int) (m float64) {
		for i := range n {
			m += c.Rate * c.Factors[(from+i+168)%168]
		}
		return m
	}
	cost := func(alpha float64) float64 {
		sum := 0.0
		for at := range 168 { // the window begins there
			before, _, _ := law(mean(at-1, 7)).CriticalUpper(alpha)
			now, _, _ := law(mean(at, 7)).CriticalUpper(alpha)
			sum += exact.CrossingUpper(law(mean(at-1, 1)), law(mean(at, 6)), law(mean(at+6, 1)), min(before, now), now)
		}
		return sum / 168 * c.slotsPerYear()
	}
	allowed := (&Outcome{Cell: &c}).Allowed()
	alpha := 0.4
	for cost(alpha) > allowed {
		alpha /= 1.02
	}
	caught(t, c, solved(t, c, 0), alpha, cost(alpha))
}

// TestFaultZeroBranchOfTrials plants the same in windows of the last trials.
func TestFaultZeroBranchOfTrials(t *testing.T) {
	c := lastTrials()[0]
	c.Series, c.Slots = 12, 365*6+c.longest()
	allowed := (&Outcome{Cell: &c}).Allowed()
	for k := int64(1); ; k++ {
		if cost := c.perSlot() * c.slotsPerYear() * exact.TrialCrossing(c.Rate, 100, k); cost <= allowed {
			caught(t, c, solved(t, c, 0), exact.NewBinomial(100, c.Rate).Upper(k), cost)
			return
		}
	}
}
