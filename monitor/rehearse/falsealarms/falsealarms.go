// Package falsealarms counts what a monitor rings for when nothing has
// happened: histories at a constant rate go through the engine, and every
// alert that it opens is a false one.
//
// # Model
//
// One series with a slot a day, a window of 28 days, the upper tail and a p
// limit of 0.001, looked at every day. Counts of a day are drawn from the
// Poisson distribution, or from the negative binomial one with a constant ratio
// of variance to mean. A history lasts some years beside the days that the
// first window takes to fill. All tests judge the same histories.
//
// # Caveats
//
// Real rates drift and have seasons, so real false alarms are more than these.
// Alerts are counted, not looks: while one signals, no other opens.
package falsealarms

import (
	"fmt"
	"math/rand/v2"
	"runtime"
	"sync"
	"sync/atomic"

	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/rehearse"
)

// window is the length of the window in days.
const window = 28

// setupText is the set-up that all histories share but for the baseline.
const setupText = `
name = "false-alarms"
folder = "unused"
[time]
mode = "history"
[[indicator]]
name = "event"
series = ["quillmere/ward"]
unit = "days"
every = "1d"
events = "each"
exposure = "clock"
clock = { size = 1, per = "1d" }
settle = "0s"
horizon = "1d"
since = "2000-01-01"
windows = ["28d"]
p_limit = 0.001
[indicator.baseline]
kind = "known"
rate = 0.1
`

// day is a slot in microseconds, and beginning the first moment of 2000.
const (
	day       = monitor.Instant(24 * 3600 * 1_000_000)
	beginning = monitor.Instant(946_684_800 * 1_000_000)
)

// Bench runs histories through engines.
type Bench struct{ setup *config.Setup }

// NewBench returns a bench. It fails only if its set-up does not validate.
func NewBench() (*Bench, error) {
	setup, err := config.Parse([]byte(setupText), "false-alarms")
	if err != nil {
		return nil, fmt.Errorf("false alarms: %w", err)
	}
	return &Bench{setup}, nil
}

// Baseline is by what a history is judged: a stated rate a day, or a reference
// of so many events in so many days.
type Baseline struct {
	Rate   float64
	Events int64
	Days   uint64 // of the reference; 0 for a stated rate
	Spread float64
}

// in returns the set-up with the baseline in it.
func (b Baseline) in(setup *config.Setup) *config.Setup {
	s := *setup
	s.Indicators = append([]config.Indicator(nil), setup.Indicators...)
	base := setup.Indicators[0].Baselines[0]
	base.Rate, base.Spread = b.Rate, max(b.Spread, 1)
	if b.Days > 0 {
		base.Kind, base.Events, base.Exposure = config.Reference, b.Events, config.Decimal{Coef: b.Days}
	}
	s.Indicators[0].Baselines = []config.Baseline{base}
	return &s
}

// Alerts returns how many alerts the engine opens over the counts of so many
// days under the baseline.
func (x *Bench) Alerts(b Baseline, counts []int64) int {
	e := monitor.New(monitor.Partition{Of: 1, KeyParts: 1})
	position := uint64(1)
	e.Apply(&monitor.Message{Position: position, Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: b.in(x.setup)}})
	say := func(at monitor.Instant, events int64) {
		position++
		e.Apply(&monitor.Message{Position: position, Kind: monitor.Observations, Items: []monitor.Item{{
			Observation: monitor.Observation{
				Series: "quillmere/ward", Start: at, End: at, Instant: true, Events: events, HasEvents: true,
			},
		}}})
	}
	say(beginning, 0)
	for i, n := range counts {
		if n > 0 {
			say(beginning+monitor.Instant(i)*day+day/2, n)
		}
	}
	say(beginning+monitor.Instant(len(counts))*day, 0)
	opened := 0
	for _, n := range e.Drain().Steps {
		if len(n.Record.Steps) == 1 {
			opened++
		}
	}
	return opened
}

// history draws the counts of the days that fill the first window and of so
// many years, at the rate a day and the spread.
func history(r *rand.Rand, years int, rate, spread float64) []int64 {
	counts := make([]int64, window+365*years)
	for i := range counts {
		counts[i] = Count(r, rate, spread)
	}
	return counts
}

// each calls do for the numbers from 0 on, on all processors.
func each(n int, do func(i int)) {
	var next atomic.Int64
	var group sync.WaitGroup
	for range runtime.GOMAXPROCS(0) {
		group.Go(func() {
			for i := int(next.Add(1)) - 1; i < n; i = int(next.Add(1)) - 1 {
				do(i)
			}
		})
	}
	group.Wait()
}

// source is the source of random numbers of one history.
func source(seed uint64, purpose string, i int) *rand.Rand {
	return rehearse.Source(seed, fmt.Sprintf("%s %d", purpose, i))
}
