package monitor

import (
	"fmt"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"
	"time"

	"tailbell/config"
)

// BenchmarkLook measures a look alone, without the observations before it: all
// slots end together, and each brings another exposure to each window. Under an
// allowance it says how many sets of limits had to be found for so many looks;
// only finding them takes sums of crossing chances.
func BenchmarkLook(b *testing.B) {
	for _, rule := range []string{"p_limit = 1e-5", `allowance = "1 in 1y"`} {
		b.Run(strings.Fields(rule)[0], func(b *testing.B) {
			const series = 2000
			setup, err := config.Parse([]byte(strings.Replace(benchSetup, "p_limit = 1e-5", rule, 1)), "set-up")
			if err != nil {
				b.Fatal(err)
			}
			e := New(Partition{Of: 1, KeyParts: 1})
			e.Apply(&Message{Position: 1, Kind: SettingMessage, Setting: Setting{Setup: setup}})
			l := &lookLoad{e: e, random: rand.New(rand.NewPCG(20261201, 5)), at: InstantOf(time.Date(2026, 3, 2, 0, 0, 0, 0, time.UTC))}
			for i := range series {
				l.names = append(l.names, fmt.Sprintf("ferrybill/eu-%d/failed-request", i))
			}
			for range 60 {
				l.report()
				l.look()
			}
			looks, reruns, known := e.account.Looks, e.account.Reruns, len(e.solutions)
			var each []float64
			b.ReportAllocs()
			b.ResetTimer()
			for range b.N {
				b.StopTimer()
				l.report()
				b.StartTimer()
				each = append(each, float64(l.look().Nanoseconds())/(3*series))
			}
			slices.Sort(each)
			if n := e.account.Looks - looks; n != int64(3*series*b.N) || e.account.Reruns != reruns {
				b.Fatalf("%d looks, %d made again", n, e.account.Reruns-reruns)
			}
			b.ReportMetric(each[len(each)/2], "ns/look(p50)")
			b.ReportMetric(float64(len(e.solutions)-known)/float64(e.account.Looks-looks), "solved/look")
		})
	}
}

type lookLoad struct {
	e      *Engine
	random *rand.Rand
	names  []string
	at     Instant
}

// report brings one slot of every series; no look falls due by it.
func (l *lookLoad) report() {
	m := &Message{Position: l.e.position + 1, Kind: Observations, Time: l.at, HasTime: true}
	for _, name := range l.names {
		o := Observation{Series: name, Start: l.at, End: l.at.Add(time.Minute), HasEvents: true, HasExposure: true, Exposure: config.Decimal{Coef: uint64(900 + l.random.IntN(200))}}
		if l.random.IntN(10) == 0 {
			o.Events = 1
		}
		m.Items = append(m.Items, Item{Observation: o})
	}
	l.e.Apply(m)
	l.e.Drain()
	l.at = l.at.Add(time.Minute)
}

// look lets the looks fall due that the slot before has settled for.
func (l *lookLoad) look() time.Duration {
	began := time.Now()
	l.e.Apply(&Message{Position: l.e.position + 1, Kind: Tick, Time: l.at, HasTime: true})
	return time.Since(began)
}
