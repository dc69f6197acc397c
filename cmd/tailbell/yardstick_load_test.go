package main

import (
	"fmt"
	"math/rand/v2"
	"strings"
	"testing"
	"time"

	"tailbell/ingest/bus"
)

// yardSetup is the mix of the yardstick: event time moves, exposure is
// reported, the baseline is estimated, there are three windows, and looks fall
// due for all series after every few observations of each.
const yardSetup = `name = "yardstick"
folder = %q
[time]
mode = "history"
[limits]
max_series = 200_000
max_ids = 10_000_000
memory = "16GiB"
[bus]
max_bytes = "8GiB"
%s
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
%s
quiet = 3
[indicator.baseline]
kind = "reference"
events = 2000
exposure = 2_000_000
`

// yardLoad says how much is published: all of it is invented.
type yardLoad struct {
	series, perSlot, slots int
	// perMessage is how many observations a message holds.
	perMessage int
	// allowance judges by an allowance instead of a limit on p.
	allowance bool
}

// rule is what a look signals by.
func (l yardLoad) rule() string {
	if l.allowance {
		return `allowance = "1 in 1y"`
	}
	return "p_limit = 1e-5"
}

func (l yardLoad) observations() int { return l.series * l.perSlot * l.slots }

func (l yardLoad) String() string {
	text := fmt.Sprintf("%d series, %d a message", l.series, l.perMessage)
	if l.allowance {
		text += ", allowance"
	}
	return text
}

// publish publishes the load and returns the position of its last message.
func (l yardLoad) publish(t *testing.T, b *bus.Bus) uint64 {
	t.Helper()
	random := rand.New(rand.NewPCG(20261201, uint64(l.series)))
	batch := make([]bus.Outgoing, 0, 1000)
	flush := func() {
		if len(batch) == 0 {
			return
		}
		if _, err := b.PublishBatch(t.Context(), batch); err != nil {
			t.Fatal(err)
		}
		batch = batch[:0]
	}
	var text strings.Builder
	held := 0
	start := time.Date(2026, 3, 2, 0, 0, 0, 0, time.UTC)
	for slot := range l.slots {
		for part := range l.perSlot {
			for i := range l.series {
				l.observation(&text, random, start, slot, part, i)
				if held++; held == l.perMessage {
					batch = append(batch, bus.Outgoing{Data: []byte(text.String())})
					text.Reset()
					held = 0
				}
				if len(batch) == cap(batch) {
					flush()
				}
			}
		}
	}
	flush()
	end, err := b.End(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	return end
}

// observation writes one: one in ten with an id, one in a hundred late by some
// slots, one series in a thousand far over what is usual.
func (l yardLoad) observation(text *strings.Builder, random *rand.Rand, start time.Time, slot, part, i int) {
	at := slot
	if slot > 6 && random.IntN(100) == 0 {
		at -= 2 + random.IntN(3)
	}
	length := time.Minute / time.Duration(l.perSlot)
	from := start.Add(time.Duration(at)*time.Minute + time.Duration(part)*length)
	one := 10 // in so many observations has an event
	if i%1000 == 7 {
		one = 1
	}
	events := 0
	if random.IntN(one) == 0 {
		events = 1
	}
	text.WriteByte('{')
	if random.IntN(10) == 0 {
		fmt.Fprintf(text, `"id":"o-%d-%d-%d",`, slot, part, i)
	}
	fmt.Fprintf(text, `"series":"ferrybill/eu-%d/failed-request","start":"%s","end":"%s","events":%d,"exposure":%d}`+"\n",
		i, from.Format(time.RFC3339), from.Add(length).Format(time.RFC3339), events, 90+random.IntN(20))
}
