package allowances

import (
	"errors"
	"fmt"
	"math"
	"runtime"
	"slices"
	"sync"
	"sync/atomic"

	"tailbell/config"
	"tailbell/exact"
	"tailbell/monitor/allowance"
	"tailbell/monitor/rehearse"
)

// Outcome is what became of a cell.
type Outcome struct {
	Cell *Cell
	// Years is how long each series was counted for.
	Years   float64
	series  []seen
	limits  []span
	lit     float64 // share of the looks that signalled
	told    float64
	tellers int64
}

// together is how many series share an engine.
const together = 50

// Play plays a cell under each of the seeds, on all processors. What comes out
// depends on the cell and the seeds alone.
func (c *Cell) Play(seeds ...uint64) (*Outcome, error) {
	engines := (c.Series + together - 1) / together
	tallies := make([]*tally, engines*len(seeds))
	errs := make([]error, len(tallies))
	var next atomic.Int64
	var group sync.WaitGroup
	for range runtime.GOMAXPROCS(0) {
		group.Go(func() {
			for i := int(next.Add(1)) - 1; i < len(tallies); i = int(next.Add(1)) - 1 {
				engine := i % engines
				r := rehearse.Source(seeds[i/engines], fmt.Sprintf("%s %d", c.Name, engine))
				tallies[i], errs[i] = c.play(r, min(together, c.Series-engine*together))
			}
		})
	}
	group.Wait()
	if err := errors.Join(errs...); err != nil {
		return nil, err
	}
	return gather(c, tallies), nil
}

func gather(c *Cell, tallies []*tally) *Outcome {
	o := &Outcome{Cell: c, Years: tallies[0].years(), limits: slices.Clone(tallies[0].limits)}
	var looks, dark int64
	for _, t := range tallies {
		o.series = append(o.series, t.series...)
		o.told += t.told
		o.tellers += t.tellers
		looks, dark = looks+t.looks, dark+t.dark
		for i, l := range t.limits {
			if l.high > 0 {
				o.limits[i] = span{min(o.limits[i].low, l.low), max(o.limits[i].high, l.high)}
			}
		}
	}
	o.lit = float64(looks-dark) / float64(looks)
	return o
}

// Allowed is how many false alerts are accepted in a year on a series.
func (o *Outcome) Allowed() float64 {
	a, err := config.ParseAllowance(o.Cell.Allowance)
	if err != nil {
		return math.NaN()
	}
	if o.Cell.Shared {
		return a.PerYear() / together
	}
	return a.PerYear()
}

// Told is how many a year the alerts themselves speak of, NaN if none does.
func (o *Outcome) Told() float64 {
	if o.Cell.Limit > 0 {
		return o.Cell.Told
	}
	return o.told / float64(o.tellers)
}

// Count is how many there were in all, in so many years, with the standard error
// of their mean a year over the series.
type Count struct {
	N          int64
	Mean, Err  float64 // a year
	Low, High  float64 // Garwood's bounds of the mean, as if each came alone
	Quantile90 float64 // of the series' own means
}

func (o *Outcome) count(of func(*seen) int64) Count {
	n := float64(len(o.series))
	var c Count
	each := make([]float64, len(o.series))
	for i := range o.series {
		k := of(&o.series[i])
		c.N += k
		each[i] = float64(k) / o.Years
	}
	c.Mean = float64(c.N) / (n * o.Years)
	squares := 0.0
	for _, x := range each {
		squares += (x - c.Mean) * (x - c.Mean)
	}
	// Where hardly anything came the spread says nothing: then as of one more.
	c.Err = max(math.Sqrt(squares/(n-1)/n), math.Sqrt(float64(c.N+1))/(n*o.Years)/2)
	l, h := exact.Garwood(c.N, 0.05)
	c.Low, c.High = l/(n*o.Years), h/(n*o.Years)
	slices.Sort(each)
	c.Quantile90 = each[min(len(each)-1, int(math.Ceil(0.9*n))-1)]
	return c
}

// Alerts counts the alerts that opened, Late those of them that looks made
// again opened; Crossings the looks that signal where the one before did not,
// Firsts the signalling first looks of each window.
func (o *Outcome) Alerts() Count { return o.count(func(s *seen) int64 { return s.alerts }) }

// Late are the alerts opened by looks that were made again.
func (o *Outcome) Late() Count { return o.count(func(s *seen) int64 { return s.late }) }

// Crossings are looks that signal where the look before them did not.
func (o *Outcome) Crossings() Count { return o.count(func(s *seen) int64 { return s.crossings }) }

// Firsts are first looks that signal.
func (o *Outcome) Firsts() Count { return o.count(func(s *seen) int64 { return s.firsts }) }

// Predicted is how many crossings a year the limits bring that the engine judged
// by, computed for just what the cell is: NaN where the exposure varies or the
// limits did, or data came that were not final.
func (o *Outcome) Predicted() float64 {
	c := o.Cell
	p, ok := c.plan()
	if !ok || c.Whole && len(c.Windows) > 1 {
		return math.NaN()
	}
	if c.Whole { // while a window fills it is not looked at, and its first look does not cross
		p.SlotsPerYear *= float64(c.Slots-c.Windows[0]) / float64(c.Slots)
	}
	var alphas []float64
	for w := range c.names() {
		slot, arrival := !c.Alone, c.Arrival
		if len(c.Trials) > 0 {
			slot, arrival = w < len(c.Windows), w >= len(c.Windows)
		}
		for d, watched := range []bool{c.Upper && slot, c.Lower && slot, arrival} {
			l := o.limits[3*w+d]
			if !watched {
				continue
			}
			if l.low != l.high || l.high >= 1 {
				return math.NaN()
			}
			alphas = append(alphas, l.high)
		}
	}
	l, err := allowance.Predict(p, alphas...)
	if err != nil {
		return math.NaN()
	}
	return l.PerYear
}

// plan is the cell as the solver sees it, on average where the rate was
// estimated; false if it has none that is exact.
func (c *Cell) plan() (*allowance.Plan, bool) {
	if c.uneven() || c.Late > 0 || c.False > 0 || c.Reference != nil && c.Reference.Drawn || len(c.Factors) == 12 || c.Exposure[0] != c.Exposure[1] {
		return nil, false
	}
	p := &allowance.Plan{
		Law:      allowance.Law{Proportion: c.Proportion, Rate: c.Rate},
		Exposure: max(1, float64(c.Exposure[0])), Cycle: c.Factors,
		Upper: c.Upper, Lower: c.Lower, SlotsPerYear: c.slotsPerYear(), PerYear: 1,
	}
	if r := c.Reference; r != nil {
		p.Law.Estimated, p.Law.Events, p.Law.Exposure = true, r.Events, r.Exposure
	}
	if c.Delay != nil {
		p.Known = c.Delay.Reported
	}
	for _, w := range c.Windows {
		p.Windows = append(p.Windows, allowance.Window{Slots: w, Step: 1, Slot: !c.Alone, Arrival: c.Arrival})
	}
	c.planned(p)
	return p, true
}

// room is by how many joint standard errors a cell may miss: with some thirty
// exact predictions chance alone exceeds it in one table of 500.
const room = 4

// Fault says in what way the outcome breaks what is promised, "" if it does not.
func (o *Outcome) Fault() string {
	alerts, crossings, allowed := o.Alerts(), o.Crossings(), o.Allowed()
	switch p := o.Cell.Promise; {
	case (p == AtMost || p == OnAverage) && alerts.Mean-room*alerts.Err > allowed:
		return fmt.Sprintf("%.4f ± %.4f false alerts a year, %s %.4f are promised", alerts.Mean, alerts.Err, p, allowed)
	case p == Assured && o.above(allowed) > 1-o.Cell.Assurance:
		return fmt.Sprintf("%.3f of the series have more than %.4f false alerts a year, assured are %.3f", o.above(allowed), allowed, 1-o.Cell.Assurance)
	case p != Nothing && o.lit > 0.5:
		return fmt.Sprintf("%.2f of the looks signal", o.lit)
	}
	if seen, told := o.spokenOf(crossings, alerts), o.Told(); o.Cell.Promise == AtMost && seen.Mean-room*seen.Err > told {
		return fmt.Sprintf("%.4f ± %.4f a year where its alerts speak of %.4f", seen.Mean, seen.Err, told)
	}
	if want := o.Predicted(); math.Abs(crossings.Mean-want) > room*crossings.Err {
		return fmt.Sprintf("%.4f ± %.4f crossings a year, %.4f are predicted", crossings.Mean, crossings.Err, want)
	}
	return ""
}

// spokenOf is what the alerts speak of: crossings where exposures are regular, else
// alerts, which an event must have entered.
func (o *Outcome) spokenOf(crossings, alerts Count) Count {
	if o.Cell.Exposure[0] != o.Cell.Exposure[1] || o.Cell.Whole || o.Cell.uneven() {
		return alerts
	}
	return crossings
}

// above is a lower bound of the share of series with more alerts than so many a
// year: those that have more by more than the error of their own count.
func (o *Outcome) above(allowed float64) float64 {
	n := 0
	for i := range o.series {
		if low, _ := exact.Garwood(o.series[i].alerts, 0.02); low/o.Years > allowed {
			n++
		}
	}
	return float64(n) / float64(len(o.series))
}
