package monitor

import (
	"fmt"
	"maps"
	"math"
	"math/rand/v2"
	"slices"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"tailbell/config"
	"tailbell/monitor/life"
)

const trialsSetup = `
name = "reference"
folder = "x"
[time]
mode = "history"
[[indicator]]
name = "wound-infection"
series = ["a/*"]
measure = "proportion"
unit = "operations"
every = "%s"
zone = "Europe/Berlin"
events = "each"
settle = "%s"
horizon = "20d"
ahead = "2d"
windows = [%s"5 trials", "14 trials"]
looks = [%s"arrival"]
p_limit = %v
quiet = 2
[indicator.baseline]
kind = "known"
rate = %v
`

// trialStream is a random stream of operations of one series, some of which are
// told late, several at once, moved, taken back, ahead of the clock, or are found
// to have been followed by an infection later.
type trialStream struct {
	arrivalStream
}

func newTrialStream(t *testing.T, seed uint64) *trialStream {
	t.Helper()
	rng := rand.New(rand.NewPCG(seed, 9))
	x := &trialStream{}
	x.rate, x.limit = 0.05+0.3*rng.Float64(), []float64{0.3, 0.1, 0.02}[rng.IntN(3)]
	x.settle = []time.Duration{0, 6 * time.Hour, 48 * time.Hour}[rng.IntN(3)]
	slots := [2]string{}
	if rng.IntN(3) == 0 {
		slots = [2]string{`"7d", `, `"slot", `}
	}
	text := fmt.Sprintf(trialsSetup, "1d", config.FormatDuration(x.settle), slots[0], slots[1], x.limit, x.rate)
	var err error
	if x.setup, err = config.Parse([]byte(text), "set-up"); err != nil {
		t.Fatal(err)
	}
	x.add(Message{Kind: SettingMessage, Setting: Setting{Setup: x.setup}})
	now := InstantOf(time.Date(2026, 3, 20, 5, 0, 0, 0, time.UTC)) // the clocks go forward within
	revisions := map[string]int64{}
	for id := range 160 {
		now += Instant(rng.ExpFloat64() * float64(day) / 3)
		if rng.IntN(20) == 0 {
			now += Instant(rng.Int64N(6 * day))
		}
		x.add(Message{Kind: Observations, HasTime: true, Time: now, Items: []Item{{Observation: someTrial(rng, now, id, x.rate, revisions)}}})
	}
	x.add(Message{Kind: Tick, HasTime: true, Time: now + Instant(9*day)})
	return x
}

func someTrial(rng *rand.Rand, now Instant, id int, rate float64, revisions map[string]int64) Observation {
	o := Observation{Series: "a/b", ID: fmt.Sprint(id), Start: now, Instant: true, HasEvents: true, HasExposure: true}
	trials := 1 + rng.Int64N(4)*rng.Int64N(2)*rng.Int64N(2)
	for range trials {
		if rng.Float64() < 1.5*rate {
			o.Events++
		}
	}
	o.Exposure = config.Decimal{Coef: uint64(trials)}
	o.Start -= Instant(rng.Int64N(3)/2) * Instant(rng.Int64N(15*day))
	o.Start += Instant(rng.Int64N(3)/2) * Instant(rng.Int64N(2*day))
	switch rng.IntN(5) {
	case 0: // at a moment that others have too
		o.Start -= o.Start % Instant(12*hour)
	case 1: // an infection alone, whose operation may be told later or never
		if rng.IntN(4) == 0 {
			o.Events, o.HasExposure, o.Exposure = 1, false, config.Decimal{}
		}
	}
	o.End = o.Start
	if id > 3 && rng.IntN(4) == 0 {
		o.ID = fmt.Sprint(id - 1 - rng.IntN(3))
		o.Retracted = rng.IntN(3) == 0
	}
	revisions[o.ID]++
	o.Revision = revisions[o.ID]
	if o.Retracted {
		return Observation{Series: "a/b", ID: o.ID, Revision: o.Revision, Retracted: true}
	}
	return o
}

// litTrials lists the looks that must signal, computed from what stands in the
// simplest way: go back from each event, moment by moment, until enough trials
// are there.
func (b *arrivalBook) litTrials(x *trialStream, e *Engine) map[string]int64 {
	ix := e.indicators[0]
	type both struct{ events, trials int64 }
	at := map[Instant]both{}
	for _, o := range b.said {
		n := at[o.Start]
		at[o.Start] = both{n.events + o.Events, n.trials + int64(o.Exposure.Coef)}
	}
	instants := slices.Sorted(maps.Keys(at))
	lit := map[string]int64{}
	for i, t := range instants {
		if at[t].events == 0 || t > e.clock || ix.cal.Slot(t)+1 <= ix.frozenAt {
			continue
		}
		for _, n := range []int64{5, 14} {
			sum, matched := both{}, true
			j := i
			for ; j >= 0 && sum.trials < n; j-- {
				one := at[instants[j]]
				sum = both{sum.events + one.events, sum.trials + one.trials}
				matched = matched && one.events <= one.trials
			}
			if sum.trials >= n && matched && binomialTail(sum.trials, sum.events, x.rate) <= x.limit {
				lit[fmt.Sprintf("%d trials to %d", n, t)] = sum.events
			}
		}
	}
	return lit
}

// binomialTail is P(X >= k) as a plain sum.
func binomialTail(n, k int64, theta float64) float64 {
	sum := 0.0
	for i := k; i <= n; i++ {
		choose := 1.0
		for j := range i {
			choose = choose * float64(n-j) / float64(j+1)
		}
		sum += choose * math.Pow(theta, float64(i)) * math.Pow(1-theta, float64(n-i))
	}
	return sum
}

// TestTrialLooks holds the looks that signal after each message against all looks
// computed anew from what stands; and the steps against those of an engine that is
// restored again and again.
func TestTrialLooks(t *testing.T) {
	kinds := map[life.StepKind]int{}
	for _, seed := range arrivalSeeds(50) {
		x := newTrialStream(t, seed)
		holdLooks(t, seed, x.messages, kinds, func(i int, e *Engine, book *arrivalBook) { compareTrials(t, seed, i, x, e, book) })
	}
	checkTame(t, kinds)
}

func compareTrials(t *testing.T, seed uint64, i int, x *trialStream, e *Engine, book *arrivalBook) {
	t.Helper()
	got := map[string]int64{}
	ix := e.indicators[0]
	for _, s := range e.series {
		for _, l := range s.tails[upper].lit {
			if l.boundary > ix.frozenAt && l.occasion.arrival {
				got[fmt.Sprintf("%d trials to %d", ix.places[l.window].Trials, l.occasion.at)] = l.events
			}
		}
	}
	if diff := cmp.Diff(book.litTrials(x, e), got); diff != "" {
		t.Fatalf("seed %d, after message %d, the looks that signal (-want +got):\n%s", seed, i+1, diff)
	}
}
