package partition

import (
	"errors"
	"flag"
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"runtime"
	"syscall"
	"testing"
	"time"

	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/store"
)

// startSetup is the mix of the yardstick (cmd/tailbell).
const startSetup = `name = "start"
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
per = 1000
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

var startFile = flag.String("start-store", "", "keep the stores of BenchmarkStart in files of this name, and use those that are there: building them takes longest")

func exists(path string) bool {
	_, err := os.Stat(path)
	return err == nil
}

var startIdentity = store.Identity{Deployment: "start", Partition: 0, Partitions: 1, KeyParts: 1}

// startStore makes a store of so many series that reported twice a slot, one time
// in ten with an id, for so many slots: all of it is invented.
func startStore(b *testing.B, series, slots int) string {
	b.Helper()
	setup, err := config.Parse([]byte(startSetup), "set-up")
	if err != nil {
		b.Fatal(err)
	}
	path := *startFile
	if path == "" {
		path = filepath.Join(b.TempDir(), "p0.store")
	} else if path += fmt.Sprintf("-%d", series); exists(path) {
		return path
	}
	st, err := store.Create(path, startIdentity, store.Options{})
	if err != nil {
		b.Fatal(err)
	}
	e := monitor.New(monitor.Partition{Number: 0, Of: 1, KeyParts: 1})
	position := uint64(1)
	e.Apply(&monitor.Message{Position: position, Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
	random := rand.New(rand.NewPCG(20261201, uint64(series)))
	start := monitor.InstantOf(time.Date(2026, 3, 2, 0, 0, 0, 0, time.UTC))
	for half := range 2 * slots {
		for i := 0; i < series; i += 100 {
			position++
			m := monitor.Message{Position: position, Kind: monitor.Observations}
			for j := i; j < min(i+100, series); j++ {
				m.Items = append(m.Items, startItem(random, start.Add(time.Duration(half)*time.Minute/2), half, j))
			}
			e.Apply(&m)
			if position%500 == 0 {
				keep(b, st, e)
			}
		}
	}
	keep(b, st, e)
	if err := st.Close(); err != nil {
		b.Fatal(err)
	}
	return path
}

func keep(b *testing.B, st *store.Store, e *monitor.Engine) {
	b.Helper()
	if err := st.Commit(e.Drain(), store.Mark{Position: e.Position()}); err != nil {
		b.Fatal(err)
	}
}

// startItem is one observation: one in ten has an event, one in ten an id, one in
// a hundred is late, and one series in a thousand is far over what is usual.
func startItem(random *rand.Rand, at monitor.Instant, half, i int) monitor.Item {
	if half > 14 && random.IntN(100) == 0 {
		at = at.Add(-time.Duration(2+random.IntN(3)) * time.Minute)
	}
	o := monitor.Observation{
		Series: fmt.Sprintf("ferrybill/eu-%d/failed-request", i), Start: at, End: at.Add(time.Minute / 2),
		HasEvents: true, HasExposure: true, Exposure: config.Decimal{Coef: uint64(90 + random.IntN(20))},
	}
	if one := 1 + 9*min(1, (i+993)%1000); random.IntN(one) == 0 {
		o.Events = 1
	}
	if random.IntN(10) == 0 {
		o.ID = fmt.Sprintf("o-%d-%d", half, i)
	}
	return monitor.Item{Observation: o}
}

func countIDs(b *testing.B, path string) int {
	b.Helper()
	st, err := store.OpenReadOnly(path, store.Options{})
	if err != nil {
		b.Fatal(err)
	}
	snap, err := st.Snapshot()
	if err := errors.Join(err, st.Close()); err != nil {
		b.Fatal(err)
	}
	return len(snap.IDs)
}

// processorTime is what this process has used of the processors.
func processorTime() time.Duration {
	var r syscall.Rusage
	if err := syscall.Getrusage(syscall.RUSAGE_SELF, &r); err != nil {
		return 0
	}
	return time.Duration(r.Utime.Nano() + r.Stime.Nano())
}

// BenchmarkStart opens a store and goes on from it, as a daemon does when it
// starts: 100,000 series and about 400,000 ids.
func BenchmarkStart(b *testing.B) {
	for _, series := range []int{1000, 100_000} {
		b.Run(fmt.Sprintf("series=%d", series), func(b *testing.B) {
			path := startStore(b, series, 20)
			ids := countIDs(b, path)
			runtime.GC()
			b.ReportAllocs()
			used := processorTime()
			for b.Loop() {
				st, err := store.Open(path, startIdentity, store.Options{})
				if err != nil {
					b.Fatal(err)
				}
				e, err := Recover(st)
				if err != nil {
					b.Fatal(err)
				}
				if n := e.SeriesCount(); n != series {
					b.Fatalf("%d series were recovered", n)
				}
				if err := st.Close(); err != nil {
					b.Fatal(err)
				}
			}
			b.ReportMetric(float64((processorTime()-used).Milliseconds())/float64(b.N), "cpu-ms/op")
			b.ReportMetric(float64(ids), "ids")
		})
	}
}
