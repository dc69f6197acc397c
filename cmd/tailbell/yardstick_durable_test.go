package main

import (
	"context"
	"errors"
	"math/rand/v2"
	"slices"
	"strings"
	"time"

	"tailbell/ingest/bus"
)

// durableTick is how often something is published.
const durableTick = 20 * time.Millisecond

// told is the last message of what was published at once.
type told struct {
	began    time.Time
	position uint64
}

// durable publishes, after the backlog, at half the pace at which Tailbell reads
// it, and measures how long it takes from publishing to what follows from it being
// durable. Bus, publisher and Tailbell share the machine.
func (y *yard) durable(length time.Duration) (reached float64, p50, p99 time.Duration) {
	y.t.Helper()
	y.open()
	ctx, stop := context.WithCancel(y.t.Context())
	ended := make(chan error, 1)
	go func() { ended <- y.daemon.run(ctx) }()
	if err := y.daemon.parts.get(0).reach(ctx, y.end); err != nil {
		y.t.Fatal(err)
	}
	speed := float64(y.load.observations()) / median(y.best["d"], func(p pace) float64 { return p.wall.Seconds() })
	sent, waits := make(chan told, 1000), make(chan []time.Duration, 1)
	go func() { waits <- y.await(ctx, sent) }()
	n, began := y.publishAt(ctx, speed/2, length, sent)
	close(sent)
	took := <-waits
	reached = float64(n) / time.Since(began).Seconds()
	stop()
	if err := errors.Join(<-ended, y.daemon.close()); err != nil {
		y.t.Fatal(err)
	}
	slices.Sort(took)
	return reached, took[len(took)/2], took[len(took)*99/100]
}

// await waits until each is durable, in turn, and returns how long that took.
func (y *yard) await(ctx context.Context, sent <-chan told) (took []time.Duration) {
	for s := range sent {
		if err := y.daemon.parts.get(0).reach(ctx, s.position); err != nil {
			y.t.Error(err)
		}
		took = append(took, time.Since(s.began))
	}
	return took
}

// publishAt publishes so many observations a second for a while, and returns how
// many and since when.
func (y *yard) publishAt(ctx context.Context, speed float64, length time.Duration, sent chan<- told) (n int, began time.Time) {
	y.t.Helper()
	random := rand.New(rand.NewPCG(20261201, 99))
	next := y.after(random)
	tick := time.NewTicker(durableTick)
	defer tick.Stop()
	for began = time.Now(); time.Since(began) < length; {
		due := int(time.Since(began).Seconds() * speed)
		var batch []bus.Outgoing
		for ; n < due && len(batch) < 5000; n += y.load.perMessage {
			batch = append(batch, bus.Outgoing{Data: []byte(next())})
		}
		if len(batch) > 0 {
			at := time.Now()
			if _, err := y.daemon.bus.PublishBatch(ctx, batch); err != nil {
				y.t.Fatal(err)
			}
			end, err := y.daemon.bus.End(ctx)
			if err != nil {
				y.t.Fatal(err)
			}
			sent <- told{at, end}
		}
		<-tick.C
	}
	return n, began
}

// after returns what writes the messages that follow the backlog.
func (y *yard) after(random *rand.Rand) func() string {
	l := y.load
	start := time.Date(2026, 3, 2, 0, 0, 0, 0, time.UTC)
	i, part, slot := 0, 0, l.slots
	return func() string {
		var text strings.Builder
		for range l.perMessage {
			l.observation(&text, random, start, slot, part, i)
			if i++; i == l.series {
				i = 0
				if part++; part == l.perSlot {
					part = 0
					slot++
				}
			}
		}
		return text.String()
	}
}
