package monitor

import (
	"fmt"
	"runtime"
	"testing"
	"time"

	"tailbell/config"
)

const footprintSetup = `
name = "footprint"
folder = "x"
[time]
mode = "history"
[limits]
max_series = 100000
max_ids = 10000000
memory = "16GiB"
[[indicator]]
name = "fall"
series = ["*/*/fall"]
unit = "bed-days"
every = "1d"
zone = "UTC"
settle = "1d"
horizon = "60d"
ids = "%s"
windows = ["7d", "28d"]
tails = ["upper"]
p_limit = 0.001
quiet = 3
[indicator.baseline]
kind = "known"
rate = 0.01
`

// BenchmarkFootprint measures what a series, a slot and an id take in memory:
// the figures behind config.Memory.
func BenchmarkFootprint(b *testing.B) {
	const series = 2000
	for _, ids := range []string{"none", "kept"} {
		for _, days := range []int{1, 80} {
			b.Run(fmt.Sprintf("ids=%s/days=%d", ids, days), func(b *testing.B) {
				for b.Loop() {
					setup, err := config.Parse(fmt.Appendf(nil, footprintSetup, ids), "set-up")
					if err != nil {
						b.Fatal(err)
					}
					before := heap()
					e := New(Partition{Of: 1, KeyParts: 1})
					e.Apply(&Message{Position: 1, Kind: SettingMessage, Setting: Setting{Setup: setup}})
					fill(e, series, days)
					b.ReportMetric(float64(heap()-before)/series, "B/series")
					runtime.KeepAlive(e)
				}
			})
		}
	}
}

func fill(e *Engine, series, days int) {
	for d := range days {
		start := InstantOf(time.Date(2026, 1, 1+d, 0, 0, 0, 0, time.UTC))
		for s := range series {
			e.Apply(&Message{Position: e.position + 1, Kind: Observations, Items: []Item{{Observation: Observation{
				Series: fmt.Sprintf("quillmere-east/ward-%d/fall", s), ID: fmt.Sprintf("lab-2026-%04d-%06d", d, s),
				Start: start, End: start.Add(24 * time.Hour), HasEvents: true, HasExposure: true,
				Events: int64(s % 100 / 99), Exposure: config.Decimal{Coef: 22},
			}}}})
		}
		e.Drain()
	}
}

func heap() int64 {
	runtime.GC()
	var m runtime.MemStats
	runtime.ReadMemStats(&m)
	return int64(m.HeapAlloc)
}
