package monitor

import (
	"fmt"
	"math/rand/v2"
	"sync"
	"testing"
	"time"

	"tailbell/config"
)

const benchSetup = `
name = "bench"
folder = "x"
[time]
mode = "history"
[limits]
max_series = 200_000
max_ids = 10_000_000
memory = "16GiB"
[[indicator]]
name = "failed-request"
series = ["ferrybill/*/failed-request"]
unit = "requests"
every = "1m"
settle = "1m"
horizon = "30m"
events = "counted"
windows = ["2m", "5m", "15m"]
p_limit = 1e-5
quiet = 3
[indicator.baseline]
kind = "reference"
events = 2000
exposure = 2_000_000
`

// benchLoad is the yardstick's mix (cmd/tailbell), already decoded: all of it
// is invented. share is in how many messages of ten an observation has an id.
type benchLoad struct {
	series, perSlot, ids int
	random               *rand.Rand
	names                []string
	position             uint64
	slot                 int
}

func newBenchLoad(series, perSlot, ids int) *benchLoad {
	l := &benchLoad{series: series, perSlot: perSlot, ids: ids, random: rand.New(rand.NewPCG(20261201, 3))}
	for i := range series {
		l.names = append(l.names, fmt.Sprintf("ferrybill/eu-%d/failed-request", i))
	}
	return l
}

// next returns the messages of one slot, of a hundred observations each.
func (l *benchLoad) next() []Message {
	start := InstantOf(time.Date(2026, 3, 2, 0, l.slot, 0, 0, time.UTC))
	length := time.Minute / time.Duration(l.perSlot)
	var messages []Message
	var items []Item
	for part := range l.perSlot {
		for i := range l.series {
			at := start.Add(time.Duration(part) * length)
			if l.slot > 6 && l.random.IntN(100) == 0 {
				at = at.Add(-time.Duration(2+l.random.IntN(3)) * time.Minute)
			}
			o := Observation{
				Series: l.names[i], Start: at, End: at.Add(length), HasEvents: true, HasExposure: true,
				Exposure: config.Decimal{Coef: uint64(90 + l.random.IntN(20))},
			}
			if one := 1 + 9*min(1, (i+993)%1000); l.random.IntN(one) == 0 {
				o.Events = 1
			}
			if l.random.IntN(10) < l.ids {
				o.ID = fmt.Sprintf("o-%d-%d-%d", l.slot, part, i)
			}
			if items = append(items, Item{Observation: o}); len(items) == 100 {
				l.position++
				messages = append(messages, Message{Position: l.position, Kind: Observations, Items: items})
				items = nil
			}
		}
	}
	l.slot++
	return messages
}

func benchEngine(b *testing.B, l *benchLoad) *Engine {
	b.Helper()
	setup, err := config.Parse([]byte(benchSetup), "set-up")
	if err != nil {
		b.Fatal(err)
	}
	e := New(Partition{Of: 1, KeyParts: 1})
	l.position++
	e.Apply(&Message{Position: l.position, Kind: SettingMessage, Setting: Setting{Setup: setup}})
	return e
}

// BenchmarkApply measures the engine alone, from decoded memory: what an
// observation costs with all looks that follow from it.
func BenchmarkApply(b *testing.B) {
	for _, series := range []int{1000, 20_000, 100_000} {
		for _, ids := range []int{0, 1, 10} {
			b.Run(fmt.Sprintf("series=%d/ids=%d0%%", series, ids), func(b *testing.B) {
				perSlot := 10
				if series > 50_000 {
					perSlot = 2 // a slot of so many is long enough
				}
				l := newBenchLoad(series, perSlot, ids)
				e := benchEngine(b, l)
				for range 16 { // windows are full then
					apply(e, l.next())
				}
				n := 0
				b.ReportAllocs()
				for b.Loop() {
					b.StopTimer()
					messages := l.next()
					b.StartTimer()
					apply(e, messages)
					n += series * perSlot
				}
				b.ReportMetric(float64(b.Elapsed().Nanoseconds())/float64(n), "ns/observation")
			})
		}
	}
}

func apply(e *Engine, messages []Message) {
	for i := range messages {
		e.Apply(&messages[i])
	}
	e.Drain()
}

// BenchmarkPartitions measures two engines on two processors against one.
func BenchmarkPartitions(b *testing.B) {
	for _, n := range []int{1, 2} {
		b.Run(fmt.Sprint(n), func(b *testing.B) {
			loads := make([]*benchLoad, n)
			engines := make([]*Engine, n)
			for i := range n {
				loads[i] = newBenchLoad(10_000/n, 10, 1)
				engines[i] = benchEngine(b, loads[i])
				for range 20 {
					apply(engines[i], loads[i].next())
				}
			}
			rounds := 0
			for b.Loop() {
				b.StopTimer()
				messages := make([][]Message, n)
				for i := range n {
					messages[i] = loads[i].next()
				}
				b.StartTimer()
				var all sync.WaitGroup
				for i := range n {
					all.Go(func() { apply(engines[i], messages[i]) })
				}
				all.Wait()
				rounds++
			}
			b.ReportMetric(float64(rounds)*100_000/b.Elapsed().Seconds(), "observations/s")
		})
	}
}
