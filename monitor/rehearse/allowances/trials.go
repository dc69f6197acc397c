package allowances

import (
	"fmt"
	"math"

	"tailbell/config"
	"tailbell/exact"
	"tailbell/monitor"
	"tailbell/monitor/allowance"
	"tailbell/monitor/rehearse"
)

// lastTrials are proportions whose last so many trials are looked at when events
// come.
func lastTrials() []Cell {
	one := func(name string, mean float64, trials []int, day [2]int, allowance string, length int) Cell {
		c := Cell{
			Name: name, Proportion: true, Exposure: day, Rate: mean / float64(trials[0]), Trials: trials,
			Allowance: allowance, Arrival: true, Alone: true,
		}
		return years(length, upper(c))
	}
	several := one("the last 100 trials, 1 to 6 at once: mean 2", 2, []int{100}, [2]int{8, 8}, "8 in 1y", 2300)
	several.Batch = [2]int{1, 6}
	alike := one("the last 100 trials, 4 at once: mean 2", 2, []int{100}, [2]int{8, 8}, "8 in 1y", 800)
	alike.Batch = [2]int{4, 4}
	beside := one("28d and the last 100 trials: mean 2 in those", 2, []int{100}, [2]int{4, 4}, "6 in 1y", 700)
	beside.Windows, beside.Alone = []int{28}, false
	estimated := one("reference of 20 events in 1000 trials: the last 100", 2, []int{100}, [2]int{4, 4}, "3 in 1y", 0)
	estimated.Promise, estimated.Reference = OnAverage, &Reference{Events: 20, Exposure: 1000}
	estimated.Series, estimated.Slots = 420, 6*365+estimated.longest()
	return []Cell{
		one("the last 100 trials, one by one: mean 2", 2, []int{100}, [2]int{4, 4}, "6 in 1y", 720),
		one("the last 300 trials, one by one: mean 30", 30, []int{300}, [2]int{4, 4}, "3 in 1y", 1200),
		one("the last 100, 400 trials, one by one: mean 2 in 100", 2, []int{100, 400}, [2]int{4, 4}, "6 in 1y", 700),
		one("the last 100 trials, 0 to 12 a day: mean 2", 2, []int{100}, [2]int{0, 12}, "6 in 1y", 900),
		alike, several, beside, estimated,
	}
}

// inBatches adds a slot's trials, each batch at a moment of its own.
func (p *player) inBatches(items []monitor.Item, i, slot, n int) []monitor.Item {
	c := p.cell
	for n > 0 {
		b := 1
		if c.Batch[1] > 0 {
			b = min(n, rehearse.Between(p.r, c.Batch[0], c.Batch[1]))
		}
		n -= b
		x := p.event(i, slot, binomial(p.r, int64(b), p.rates[i]))
		x.Observation.Exposure, x.Observation.HasExposure = config.Decimal{Coef: uint64(b)}, true
		items = append(items, x)
	}
	return items
}

// batch is what came at one moment.
type batch struct{ events, trials int64 }

// book keeps the batches of a series as far back as its windows reach, and says
// what they hold.
type book struct{ batches []batch }

// add adds a batch and forgets those that no window of so many trials reaches.
func (b *book) add(next batch, most int64) {
	b.batches = append(b.batches, next)
	held := int64(0)
	for i := len(b.batches) - 1; i >= 0; i-- {
		if held += b.batches[i].trials; held >= most {
			b.batches = b.batches[i:]
			return
		}
	}
}

// last is what the window of the last n trials holds; false while it is filling.
func (b *book) last(n int64) (held batch, full bool) {
	for i := len(b.batches) - 1; i >= 0 && held.trials < n; i-- {
		held.events += b.batches[i].events
		held.trials += b.batches[i].trials
	}
	return held, held.trials >= n
}

// trials notes what is about to be told, where windows are of trials: before, what
// each window of the series held until now.
func (t *tally) trials(o *monitor.Observation) {
	if len(t.cell.Trials) == 0 || !o.HasExposure {
		return
	}
	b := &t.books[number(o.Series)]
	t.before = t.before[:0]
	most := 0
	for _, n := range t.cell.Trials {
		held, full := b.last(int64(n))
		if !full {
			held = batch{}
		}
		t.before = append(t.before, held)
		most = max(most, n)
	}
	b.add(batch{o.Events, int64(o.Exposure.Coef)}, int64(most))
}

// crosses reports whether a look over trials signals where the window before its
// batch did not, under the same limit.
func (t *tally) crosses(v *monitor.View, w int) bool {
	held := t.before[w-len(t.cell.Windows)]
	return v.Upper.Signals && !(held.trials > 0 && held.events > 0 && exact.AtMost(t.tail(held), v.Upper.Limit))
}

// tail is the p-value of what a window holds, which is kept.
func (t *tally) tail(held batch) float64 {
	p, known := t.tails[held]
	if known {
		return p
	}
	if ref := t.cell.Reference; ref != nil {
		p = exact.TwoProportion{RefEvents: ref.Events, RefTrials: int64(ref.Exposure), Trials: held.trials, Margin: 1}.Upper(held.events)
	} else {
		p = exact.NewBinomial(held.trials, t.cell.Rate).Upper(held.events)
	}
	t.tails[held] = p
	return p
}

// toFill is how many slots the longest window of trials takes to fill, with room.
func (c *Cell) toFill() int {
	longest := 0
	for _, n := range c.Trials {
		longest = max(longest, n)
	}
	if longest == 0 {
		return 0
	}
	return 14 + int(math.Ceil(1.3*float64(longest)/c.perSlot()))
}

// perSlot is the mean number of trials, or the mean exposure, of a slot.
func (c *Cell) perSlot() float64 { return float64(c.Exposure[0]+c.Exposure[1]) / 2 }

// names are those of all windows, as the set-up has them.
func (c *Cell) names() []string {
	unit := "d"
	if c.Hourly {
		unit = "h"
	}
	var names []string
	for _, n := range c.Windows {
		names = append(names, fmt.Sprint(n, unit))
	}
	for _, n := range c.Trials {
		names = append(names, fmt.Sprint(n, " trials"))
	}
	return names
}

// planned adds the windows of trials to the plan that is predicted by.
func (c *Cell) planned(p *allowance.Plan) {
	if len(c.Trials) == 0 {
		return
	}
	p.Volume, p.Batch = c.perSlot(), [2]int64{int64(c.Batch[0]), int64(c.Batch[1])}
	for i := range p.Windows {
		p.Windows[i].Arrival = false // those of time are looked at when slots have settled
	}
	for _, n := range c.Trials {
		p.Windows = append(p.Windows, allowance.Window{Trials: int64(n), Arrival: true})
	}
}

// uneven reports batches of different sizes, for which there is no exact
// prediction.
func (c *Cell) uneven() bool { return c.Batch[0] != c.Batch[1] }
