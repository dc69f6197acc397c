package allowances

import (
	"cmp"
	"errors"
	"fmt"
	"math"
	"math/rand/v2"
	"slices"

	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/life"
	"tailbell/monitor/rehearse"
)

// beginning is the first moment of 2001, a Monday.
const beginning = monitor.Instant(978_307_200 * 1_000_000)

// ErrRefused is returned if an engine refuses what a cell plays to it.
var ErrRefused = errors.New("allowances: the engine refused an input")

// player plays so many series of a cell to one engine.
type player struct {
	cell   *Cell
	r      *rand.Rand
	e      *monitor.Engine
	rates  []float64
	length monitor.Instant
	at     uint64
	// later are the items of slots to come.
	later map[int][]monitor.Item
	ids   int
	tally *tally
}

// play plays the series of a cell to an engine and returns what it made of them.
func (c *Cell) play(r *rand.Rand, series int) (*tally, error) {
	p := &player{cell: c, r: r, length: monitor.Instant(c.slot().Microseconds()), later: map[int][]monitor.Item{}}
	references := p.drawRates(series)
	setup, err := c.setup(series, references)
	if err != nil {
		return nil, err
	}
	p.e = monitor.New(monitor.Partition{Of: 1, KeyParts: 1})
	p.e.Pass()
	p.tally = newTally(c, series)
	p.e.OnLook(p.tally.look)
	p.apply(monitor.Message{Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
	for slot := range c.Slots {
		items := p.later[slot]
		delete(p.later, slot)
		for i := range series {
			items = p.observe(items, i, slot)
		}
		if err := p.tell(items, slot); err != nil {
			return nil, err
		}
	}
	p.apply(monitor.Message{Kind: monitor.Tick, Time: p.start(c.Slots), HasTime: true})
	return p.tally, p.settle()
}

// tell brings the engine what is reported of a slot, when it ends or, where looks
// are made at arrivals, each event when it comes.
func (p *player) tell(items []monitor.Item, slot int) error {
	if !p.cell.Arrival {
		p.apply(monitor.Message{Kind: monitor.Observations, Items: items, Time: p.start(slot+1) - 1, HasTime: true})
		return p.settle()
	}
	slices.SortStableFunc(items, func(a, b monitor.Item) int { return cmp.Compare(a.Observation.Start, b.Observation.Start) })
	for i, x := range items {
		p.tally.trials(&items[i].Observation)
		p.apply(monitor.Message{Kind: monitor.Observations, Items: items[i : i+1], Time: x.Observation.Start, HasTime: true})
		if err := p.settle(); err != nil {
			return err
		}
	}
	return nil
}

func (p *player) apply(m monitor.Message) {
	p.at++
	m.Position = p.at
	p.e.Apply(&m)
}

func (p *player) start(slot int) monitor.Instant {
	return beginning + monitor.Instant(slot)*p.length
}

// drawRates draws the rate of each series, and the references of those that have
// one of their own.
func (p *player) drawRates(series int) (references []int64) {
	c := p.cell
	up := int64(1) // the law under which the average tail is the conditional test's p
	if !c.Upper {
		up = 0
	}
	p.rates = make([]float64, series)
	for i := range p.rates {
		p.rates[i] = c.Rate
		switch ref := c.Reference; {
		case ref == nil:
		case ref.Drawn && c.Proportion:
			references = append(references, rehearse.Binomial(p.r, int64(ref.Exposure), c.Rate))
		case ref.Drawn:
			references = append(references, rehearse.Poisson(p.r, c.Rate*ref.Exposure))
		case c.Proportion: // beta laws, as two sums of exponential gaps
			a, b := gamma(p.r, ref.Events+up), gamma(p.r, int64(ref.Exposure)-ref.Events+1-up)
			p.rates[i] = a / (a + b)
		default:
			p.rates[i] = gamma(p.r, ref.Events+up) / ref.Exposure
		}
	}
	return references
}

// gamma draws from the gamma law with a whole shape and scale 1.
func gamma(r *rand.Rand, shape int64) float64 {
	sum := 0.0
	for range shape {
		sum += r.ExpFloat64()
	}
	return sum
}

// factor is that of the slot's stratum.
func (p *player) factor(slot int) float64 {
	f := p.cell.Factors
	if len(f) == 0 {
		return 1
	}
	s := config.Strata{By: map[int]config.StrataBy{7: config.ByWeekday, 168: config.ByHourOfWeek, 12: config.ByMonth}[len(f)]}
	return f[s.Index(p.start(slot).Time())]
}

// observe adds what is reported of a series' slot when it ends, and puts off
// what is reported later.
func (p *player) observe(items []monitor.Item, i, slot int) []monitor.Item {
	c, rate, factor := p.cell, p.rates[i], p.factor(slot)
	if c.reported() {
		n := rehearse.Between(p.r, c.Exposure[0], c.Exposure[1])
		if len(c.Trials) > 0 {
			return p.inBatches(items, i, slot, n)
		}
		o := monitor.Observation{
			Series: name(i), Start: p.start(slot), End: p.start(slot + 1),
			HasEvents: true, Exposure: config.Decimal{Coef: uint64(n)}, HasExposure: true,
		}
		if c.Proportion {
			odds := rate / (1 - rate) * factor
			o.Events = binomial(p.r, int64(n), odds/(1+odds))
		} else {
			o.Events = rehearse.Poisson(p.r, rate*factor*float64(n))
		}
		return append(items, monitor.Item{Observation: o})
	}
	if slot == 0 { // the series begins here, whatever happens
		items = append(items, p.event(i, slot, 0))
	}
	for range rehearse.Poisson(p.r, rate*factor) {
		x := p.event(i, slot, 1)
		if by := p.lateBy(); by > 0 {
			p.later[slot+by] = append(p.later[slot+by], x)
		} else {
			items = append(items, x)
		}
	}
	if c.False > 0 {
		for range rehearse.Poisson(p.r, c.False*rate*factor) {
			p.ids++
			x := p.event(i, slot, 1)
			x.Observation.ID = fmt.Sprint("x", p.ids)
			items = append(items, x)
			back := monitor.Observation{Series: x.Observation.Series, ID: x.Observation.ID, Revision: 1, Retracted: true}
			p.later[slot+c.LateBy] = append(p.later[slot+c.LateBy], monitor.Item{Observation: back})
		}
	}
	return items
}

// event is that of so many at a random moment of the slot.
func (p *player) event(i, slot int, n int64) monitor.Item {
	at := p.start(slot) + monitor.Instant(p.r.Int64N(int64(p.length)-1))
	return monitor.Item{Observation: monitor.Observation{Series: name(i), Start: at, End: at, Instant: true, Events: n, HasEvents: true}}
}

// lateBy draws by how many slots a report is late.
func (p *player) lateBy() int {
	c := p.cell
	if c.Delay != nil {
		u := p.r.Float64()
		for by, share := range c.Delay.Reported {
			if u < share {
				return by
			}
		}
	}
	if c.Late > 0 && p.r.Float64() < c.Late {
		return c.LateBy
	}
	return 0
}

// binomial draws the number of events in n trials: one by one, or by the gaps
// between events where they are rare (geometric; Devroye 1986, Non-Uniform Random
// Variate Generation, X.4.3).
func binomial(r *rand.Rand, n int64, p float64) (k int64) {
	if p > 0.2 {
		return rehearse.Binomial(r, n, p)
	}
	logQ := math.Log1p(-p)
	for left := float64(n); ; k++ {
		if left -= math.Floor(-r.ExpFloat64()/logQ) + 1; left < 0 {
			return k
		}
	}
}

// settle counts the alerts that opened, and closes them if people do.
func (p *player) settle() error {
	found := p.e.Findings()
	if len(found.Refused) > 0 {
		return fmt.Errorf("%w: %+v", ErrRefused, found.Refused[0])
	}
	for i := range found.Steps {
		n := &found.Steps[i]
		if n.Step.Kind != life.StepOpened {
			continue
		}
		p.tally.opened(&n.Record)
		if p.cell.Closed {
			p.apply(monitor.Message{Kind: monitor.ActMessage, Act: monitor.Act{
				Kind: monitor.Close, Alert: n.Record.ID, By: "a nurse", Why: "played", At: p.e.Clock(), HasAt: true,
			}})
		}
	}
	if p.cell.Closed && len(found.Steps) > 0 {
		if found := p.e.Findings(); len(found.Refused) > 0 {
			return fmt.Errorf("%w: %+v", ErrRefused, found.Refused[0])
		}
	}
	return nil
}
