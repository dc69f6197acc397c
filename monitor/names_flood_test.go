package monitor

import (
	"fmt"
	"runtime"
	"testing"
	"time"

	"tailbell/config"
)

const namesSetup = `name = "flood"
[limits]
max_series = 1000
max_ids = 5000
[[indicator]]
name = "failure"
series = ["ferrybill/*/failure"]
unit = "requests"
every = "1m"
settle = "1m"
horizon = "1h"
windows = ["10m"]
p_limit = 1e-6
quiet = 3
[indicator.baseline]
kind = "known"
rate = 0.001
`

// TestMillionNames sends a million series, each with an id, against limits of a
// thousand and five thousand: the first are counted, all others refused, and
// memory stays as small as the limits have it.
func TestMillionNames(t *testing.T) {
	names := 1_000_000
	if testing.Short() {
		names = 50_000
	}
	setup, err := config.Parse([]byte(namesSetup), "test")
	if err != nil {
		t.Fatal(err)
	}
	e := New(Partition{Of: 1, KeyParts: 1})
	e.Apply(&Message{Position: 1, Kind: SettingMessage, Setting: Setting{Setup: setup}})
	start := InstantOf(time.Date(2026, 3, 2, 0, 0, 0, 0, time.UTC))
	const perMessage = 500
	refused := map[Reason]int{}
	var atLimit uint64
	for n := 0; n < names; n += perMessage {
		m := &Message{Position: uint64(n + 2), Stored: start, Kind: Observations}
		for i := range perMessage {
			m.Items = append(m.Items, Item{Observation: Observation{
				Series: fmt.Sprintf("ferrybill/eu-%d/failure", n+i), ID: fmt.Sprintf("i%d", n+i), Start: start, End: start,
				Instant: true, Events: 1, HasEvents: true,
			}})
		}
		e.Apply(m)
		for _, r := range e.Drain().Refused {
			refused[r.Reason]++
		}
		if n == 10*perMessage {
			atLimit = heapNow()
		}
	}
	a := e.Account()
	if a.Elements != int64(names) || a.Counted+a.Withheld != 1000 || refused[SeriesFull] != names-1000 || len(refused) != 1 || !a.Balanced() {
		t.Errorf("account %+v, refused %v", a, refused)
	}
	if grown := int64(heapNow()) - int64(atLimit); grown > 4<<20 {
		t.Errorf("the heap has grown by %d KiB since the limit was reached", grown>>10)
	} else {
		t.Logf("%d names; the heap has grown by %d KiB since the limit was reached", names, grown>>10)
	}
	runtime.KeepAlive(e)
}

func heapNow() uint64 {
	runtime.GC()
	var s runtime.MemStats
	runtime.ReadMemStats(&s)
	return s.HeapAlloc
}
