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

const (
	// durableTick is how often something is published.
	durableTick = 20 * time.Millisecond
	// durableBatch is the most messages that are published at once: one atomic
	// batch of the bus.
	durableBatch = 1000
)

// told is the last message of what was published at once.
type told struct {
	began, stored time.Time
	position      uint64
}

// waits are how long it took until what was published was durable: from before it
// was published, and from when the bus had stored it.
type waits struct {
	published, stored []time.Duration
}

// durable publishes, after the backlog, at half the pace at which Tailbell reads
// it, or as fast as the bus takes it, and measures how long it takes from
// publishing to what follows from it being durable. Bus, publisher and Tailbell
// share the machine.
func (y *yard) durable(length time.Duration) (wanted, reached float64, took waits) {
	y.t.Helper()
	y.open()
	ctx, stop := context.WithCancel(y.t.Context())
	ended := make(chan error, 1)
	go func() { ended <- y.daemon.run(ctx) }()
	end, err := y.daemon.bus.End(ctx)
	if err == nil {
		err = y.daemon.parts.get(0).reach(ctx, max(end, y.end))
	}
	if err != nil {
		y.t.Fatal(err)
	}
	speed := float64(y.load.observations()) / median(y.best["d"], func(p pace) float64 { return p.wall.Seconds() })
	sent, all := make(chan told, 1000), make(chan waits, 1)
	go func() { all <- y.await(ctx, sent) }()
	n, began := y.publishAt(ctx, speed/2, length, end, sent)
	close(sent)
	took = <-all
	reached = float64(n) / time.Since(began).Seconds()
	stop()
	if err := errors.Join(<-ended, y.daemon.close()); err != nil {
		y.t.Fatal(err)
	}
	slices.Sort(took.published)
	slices.Sort(took.stored)
	return speed / 2, reached, took
}

// tellDurable tells what durable measured.
func (y *yard) tellDurable(place string, length time.Duration) {
	y.t.Helper()
	wanted, reached, took := y.durable(length)
	at := func(of []time.Duration, percent int) time.Duration {
		return of[min(len(of)*percent/100, len(of)-1)].Round(time.Millisecond / 10)
	}
	y.t.Logf("figure | published to durable, %s %s, %.0f of %.0f observations a second: median %s, 99%% %s; from when the bus had stored it: %s, %s |",
		place, y.load, reached, wanted, at(took.published, 50), at(took.published, 99), at(took.stored, 50), at(took.stored, 99))
}

// await waits until each is durable, in turn, and returns how long that took.
func (y *yard) await(ctx context.Context, sent <-chan told) (took waits) {
	for s := range sent {
		if err := y.daemon.parts.get(0).reach(ctx, s.position); err != nil {
			y.t.Error(err)
		}
		took.published = append(took.published, time.Since(s.began))
		took.stored = append(took.stored, time.Since(s.stored))
	}
	return took
}

// publishAt publishes so many observations a second for a while behind the end of
// the stream, and returns how many and since when.
func (y *yard) publishAt(ctx context.Context, speed float64, length time.Duration, end uint64, sent chan<- told) (n int, began time.Time) {
	y.t.Helper()
	random := rand.New(rand.NewPCG(20261201, 99))
	next := y.after(random)
	tick := time.NewTicker(durableTick)
	defer tick.Stop()
	for began = time.Now(); time.Since(began) < length; {
		due := int(time.Since(began).Seconds() * speed)
		var batch []bus.Outgoing
		for ; n < due && len(batch) < durableBatch; n += y.load.perMessage {
			batch = append(batch, bus.Outgoing{Data: []byte(next())})
		}
		if len(batch) > 0 {
			at := time.Now()
			if _, err := y.daemon.bus.PublishBatch(ctx, batch); err != nil {
				y.t.Fatal(err)
			}
			end += uint64(len(batch))
			sent <- told{at, time.Now(), end}
		}
		if n >= due {
			<-tick.C
		}
	}
	if last, err := y.daemon.bus.End(ctx); err != nil || last != end {
		y.t.Fatalf("the stream ends at %d instead of %d: %v", last, end, err)
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
