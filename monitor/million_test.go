package monitor

import (
	options "flag"
	"fmt"
	"math/rand/v2"
	"os"
	"runtime"
	"slices"
	"strings"
	"syscall"
	"testing"
	"time"

	"tailbell/config"
)

var (
	millionSeries  = options.Int("million", 2000, "how many series TestMillion has")
	millionMinutes = options.Int("million-minutes", 70, "how many minutes TestMillion plays after the series have begun")
)

const millionSetup = `
name = "million"
folder = "x"
[limits]
max_series = %d
memory = "256GiB"
[[indicator]]
name = "restart"
series = ["ferrybill/*/restart"]
unit = "host-hours"
every = "1m"
settle = "1m"
since = 2026-03-01T00:00:00Z
horizon = "10m"
events = "each"
exposure = "clock"
clock = { size = 1, per = "1h" }
ids = "none"
windows = ["5m", "1h", "1d"]
tails = ["upper"]
p_limit = 1e-7
quiet = 3
[[indicator.baseline]]
series = "ferrybill/busy-*/restart"
kind = "known"
rate = 60
[[indicator.baseline]]
kind = "known"
rate = 3
`

// TestMillion plays very many series of which one in twenty has an event in a
// minute, as many as usual, and whose slots all end together; one in a thousand
// rings all the time. It tells what they hold in memory, and how long the looks of
// a minute keep what comes after them waiting. By hand:
//
//	go test ./monitor -run TestMillion -million 1000000 -million-minutes 12 -v -timeout 20m
func TestMillion(t *testing.T) {
	for _, way := range []string{"the same", "others each minute"} {
		t.Run(way, func(t *testing.T) { playMillion(t, way == "the same") })
	}
}

func playMillion(t *testing.T, same bool) {
	t.Helper()
	n := *millionSeries
	setup, err := config.Parse(fmt.Appendf(nil, millionSetup, n), "set-up")
	if err != nil {
		t.Fatal(err)
	}
	names := make([]string, n)
	for i := range names {
		kind := "host"
		if same && i%20 == 0 {
			kind = "busy"
		}
		names[i] = fmt.Sprintf("ferrybill/%s-%d/restart", kind, i)
	}
	e := New(Partition{Of: 1, KeyParts: 1})
	start := InstantOf(time.Date(2026, 3, 2, 0, 0, 0, 0, time.UTC))
	e.Apply(&Message{Position: 1, Kind: SettingMessage, Stored: start, Setting: Setting{Setup: setup}})
	e.Apply(&Message{Position: 2, Kind: Live, Stored: start})
	before := heap()
	random := rand.New(rand.NewPCG(20261201, 12))
	// All windows are full from the beginning, as all series have begun earlier.
	report(e, names, start)
	start = start.Add(2 * time.Minute)
	e.Apply(&Message{Position: e.position + 1, Kind: Tick, Stored: start})
	e.Drain()
	quiet := heap() - before
	looks := e.account.Looks
	var waits, cpu []time.Duration
	runtime.LockOSThread()
	defer runtime.UnlockOSThread()
	for minute := range *millionMinutes {
		at := start.Add(time.Duration(minute) * time.Minute)
		active := make([]string, 0, n/20)
		for i := range n / 20 {
			if same {
				i = i * 20
			} else {
				i = random.IntN(n)
			}
			active = append(active, names[i])
		}
		for i := 7; i < n; i += 1000 {
			active = append(active, names[i], names[i], names[i])
		}
		report(e, active, at.Add(10*time.Second))
		began, used := time.Now(), threadTime()
		e.Apply(&Message{Position: e.position + 1, Kind: Tick, Stored: at.Add(time.Minute)})
		waits, cpu = append(waits, time.Since(began)), append(cpu, threadTime()-used)
		e.Drain()
	}
	slices.Sort(waits)
	slices.Sort(cpu)
	t.Logf("figure | %s, %d series: %d B each when quiet, %d B at the end; resident %d MiB; %d looks, %d alerts; the looks of a minute take %s (median), %s at most, %s of a processor (median) |",
		t.Name(), n, quiet/int64(n), (heap()-before)/int64(n), residentMiB(), e.account.Looks-looks, len(e.alerts), waits[len(waits)/2], waits[len(waits)-1], cpu[len(cpu)/2])
	if want := int64(n * 3 * *millionMinutes); e.account.Looks-looks != want {
		t.Errorf("%d looks, want %d", e.account.Looks-looks, want)
	}
	runtime.KeepAlive(names)
}

// report reports an event of each of the series.
func report(e *Engine, series []string, at Instant) {
	for block := range slices.Chunk(series, 1000) {
		m := &Message{Position: e.position + 1, Kind: Observations, Stored: at}
		for _, name := range block {
			m.Items = append(m.Items, Item{Observation: Observation{Series: name, Start: at, End: at, Instant: true, Events: 1, HasEvents: true}})
		}
		e.Apply(m)
		e.Drain()
	}
}

// threadTime is what this thread has used of the processors, 0 where that is not
// told.
func threadTime() time.Duration {
	const ofThread = 1
	var r syscall.Rusage
	if err := syscall.Getrusage(ofThread, &r); err != nil {
		return 0
	}
	return time.Duration(r.Utime.Nano() + r.Stime.Nano())
}

// residentMiB is what the process occupies, 0 where that is not told.
func residentMiB() (n int) {
	text, err := os.ReadFile("/proc/self/status")
	if err != nil {
		return 0
	}
	if _, after, ok := strings.Cut(string(text), "VmRSS:"); ok {
		if _, err := fmt.Sscan(after, &n); err != nil {
			return 0
		}
	}
	return n >> 10
}
