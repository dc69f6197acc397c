package main

import (
	"context"
	"errors"
	"fmt"
	"slices"
	"sync"
	"time"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/intake"
	"tailbell/ingest/wire"
	"tailbell/monitor"
)

// startPart runs a partition until ctx ends or its stop is called. What fails
// ends the daemon.
func (d *daemon) startPart(ctx context.Context, p *part) {
	ctx, p.stop = context.WithCancel(ctx)
	start := func(f func(context.Context) error) {
		p.running.Go(func() {
			if err := f(ctx); err != nil {
				d.fail(err)
			}
		})
	}
	context.AfterFunc(ctx, p.leave)
	start(func(ctx context.Context) error { return d.explain(p, p.loop.Run(ctx)) })
	for _, q := range p.queues {
		start(q.Run)
	}
	p.running.Go(func() { p.ticker.Run(ctx) })
	p.running.Go(func() { p.teller.Run(ctx) })
	if !d.setup.History {
		p.running.Go(func() { d.goLive(ctx, p) })
	}
}

// full waits before a commit that found no room is tried again.
func (d *daemon) full(ctx context.Context, p *part, err error) error {
	d.log.Error().Err(err).Msg("intake stands still")
	p.noRoom.Store(true)
	d.troubles.set(troubleNoRoom, p.number, "the intake stands still: "+err.Error())
	select {
	case <-time.After(2 * time.Second):
		return nil
	case <-p.gone.Done(): // the stream brings it again
		return err
	case <-ctx.Done():
		return ctx.Err()
	}
}

// committed notes a commit and wakes what waits for one.
func (d *daemon) committed(p *part, position uint64) {
	if p.noRoom.CompareAndSwap(true, false) {
		d.log.Info().Int("partition", p.number).Msg("there is room again")
		d.troubles.clear(troubleNoRoom, p.number)
	}
	if !p.taken.IsZero() {
		p.first.Do(func() {
			d.log.Info().Int("partition", p.number).Uint64("epoch", p.epoch).Dur("opening", p.opened.Sub(p.taken)).Dur("since_claim", time.Since(p.taken)).Msg("the first commit since the partition was taken")
		})
	}
	p.mu.Lock()
	if position > 0 {
		p.mu.position = position
	}
	close(p.mu.moved)
	p.mu.moved = make(chan struct{})
	p.mu.Unlock()
	for _, q := range p.queues {
		q.Wake()
	}
	p.ticker.Wake()
	p.teller.Wake()
	if d.page != nil {
		d.page.Committed()
	}
}

// reach waits until the position is committed.
func (p *part) reach(ctx context.Context, position uint64) error {
	for {
		p.mu.Lock()
		have, moved := p.mu.position, p.mu.moved
		p.mu.Unlock()
		if have >= position {
			return nil
		}
		select {
		case <-moved:
		case <-ctx.Done():
			return ctx.Err()
		}
	}
}

// explain says how far the stream differs from the store if that is what ended
// the loop.
func (d *daemon) explain(p *part, err error) error {
	if !errors.Is(err, bus.ErrBeyondEnd) && !errors.Is(err, bus.ErrStreamReplaced) {
		return err
	}
	ctx, cancel := context.WithTimeout(context.Background(), busPatience)
	defer cancel()
	diff, compareErr := intake.Compare(ctx, d.bus, p.store)
	if compareErr != nil || diff == nil {
		return err
	}
	return fmt.Errorf("partition %d: %w", p.number, diff)
}

// liveAgain is how long to wait before it is tried again to go live.
const liveAgain = time.Second

// goLive ends history time once the partition has read what the stream held at
// the start. A bus that is away is waited for.
func (d *daemon) goLive(ctx context.Context, p *part) {
	for ctx.Err() == nil {
		err := d.goLivePart(ctx, p)
		if err == nil {
			d.log.Info().Int("partition", p.number).Msg("live")
			return
		}
		if ctx.Err() == nil {
			d.log.Error().Err(err).Int("partition", p.number).Msg("going live")
		}
		select {
		case <-time.After(liveAgain):
		case <-ctx.Done():
		}
	}
}

func (d *daemon) goLivePart(ctx context.Context, p *part) error {
	end, err := d.bus.EndOf(ctx, p.number)
	if err != nil {
		return err
	}
	if err := p.reach(ctx, end); err != nil {
		return err
	}
	var history bool
	if err := p.do(ctx, func(e *monitor.Engine) { history = e.InHistory() }); err != nil || !history {
		return err
	}
	if countsAcross(d.setup) {
		if err := d.catchUp(ctx, p); err != nil {
			return err
		}
	}
	_, err = d.bus.Publish(ctx, bus.Outgoing{
		Partition: p.number, Kind: bus.Tick, Header: map[string][]string{wire.LiveHeader: {"1"}},
	})
	return err
}

// countsAcross reports whether partitions tell each other what they count.
func countsAcross(setup *config.Setup) bool {
	return slices.ContainsFunc(setup.Indicators, func(in config.Indicator) bool { return in.CountsAcross(setup.KeyParts) })
}

// catchUp brings the partition's clock to the bus's while it is in history time,
// where partitions wait for what the others count. In live time none does: each
// would pass the days since its last report without the others.
func (d *daemon) catchUp(ctx context.Context, p *part) error {
	position, err := d.bus.Publish(ctx, bus.Outgoing{Partition: p.number, Kind: bus.Tick}) // says what time it is
	if err != nil {
		return err
	}
	raw, err := d.bus.At(ctx, position)
	if err != nil {
		return err
	}
	position, err = d.bus.Publish(ctx, bus.Outgoing{
		Partition: p.number, Kind: bus.Tick, Header: map[string][]string{wire.TimeHeader: {wire.FormatTime(monitor.InstantOf(raw.Stored))}},
	})
	if err != nil {
		return err
	}
	return p.reach(ctx, position)
}

// flush delivers what still waits, each outlet beside the others. An outlet
// that is down keeps its steps: they are delivered at the next start.
func (d *daemon) flush(parts []*part) {
	ctx, cancel := context.WithTimeout(context.Background(), 5*time.Second)
	defer cancel()
	var flushing sync.WaitGroup
	for _, p := range parts {
		for _, q := range p.queues {
			flushing.Go(func() {
				if err := q.Flush(ctx); err != nil {
					d.log.Error().Err(err).Str("outlet", q.Name()).Int("partition", p.number).Msg("steps stay undelivered for now")
				}
			})
		}
	}
	flushing.Wait()
}
