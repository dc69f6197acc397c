package divide

import (
	"context"
	"errors"
	"fmt"
	"sync"
	"time"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/intake"
	"tailbell/monitor"
	"tailbell/monitor/partition"
	"tailbell/monitor/store"
)

// Stream is what stores are filled from: the bus, or a division of it.
type Stream interface {
	Source(ctx context.Context, partition int, after uint64) (*bus.Source, error)
	Summaries(ctx context.Context, partition int, after uint64) (*bus.Source, error)
	EndOf(ctx context.Context, partition int) (uint64, error)
	LastSummary(ctx context.Context, partition int) (uint64, error)
}

// Group are the stores of all partitions of a deployment. They are filled beside
// each other, since each may have to wait for what the others tell.
type Group struct {
	Setup  *config.Setup
	Stores []*store.Store
	From   Stream
	// Tell puts what partitions tell each other into the stream.
	Tell func(ctx context.Context, rows []store.ToldRow) error
}

// Fill brings all stores to the end of the stream, or as far as they come: one
// whose next message waits for what another one will tell later stays before it,
// as under a daemon.
func (g *Group) Fill(ctx context.Context) (err error) {
	run, stop := context.WithCancelCause(ctx)
	f := &filling{Group: g, wake: make(chan struct{}, 1), parts: make([]filled, len(g.Stores))}
	var running sync.WaitGroup
	defer func() {
		stop(nil)
		running.Wait()
		for i := range f.parts {
			if in := f.parts[i].intake; in != nil {
				err = errors.Join(err, in.Close())
			}
		}
	}()
	for n := range g.Stores {
		if err := f.open(ctx, n); err != nil {
			return fmt.Errorf("partition %d: %w", n, err)
		}
	}
	for n := range f.parts {
		running.Go(func() {
			if err := f.parts[n].loop.Run(run); err != nil {
				stop(fmt.Errorf("partition %d: %w", n, err))
			}
		})
	}
	return f.watch(run)
}

// filling is a group at work.
type filling struct {
	*Group
	parts []filled
	wake  chan struct{} // something moved
	mu    sync.Mutex    // guards what the parts' loops say
}

// filled is one partition of it.
type filled struct {
	intake *intake.Intake
	loop   *partition.Loop
	stand  partition.Stand
	// end and told are the positions of the last message and of the last summary.
	end, told uint64
}

func (f *filling) open(ctx context.Context, n int) error {
	p := &f.parts[n]
	engine, err := partition.Recover(f.Stores[n])
	if err != nil {
		return err
	}
	p.stand = partition.Stand{Position: engine.Position(), Ahead: engine.Ahead()}
	if err := f.ends(ctx, n); err != nil {
		return err
	}
	source, err := f.From.Source(ctx, n, engine.Position())
	if err != nil {
		return err
	}
	p.intake = intake.Over(source, f.Setup, intake.Options{
		Stored: monitor.Beginning, Now: unhurried,
		Summaries: func(ctx context.Context, after uint64) (*bus.Source, error) { return f.From.Summaries(ctx, n, after) },
	})
	p.loop = partition.New(engine, f.Stores[n], p.intake, partition.Options{
		Ahead: p.intake.Ahead, Moved: func(s partition.Stand) { f.moved(n, s) },
	})
	return nil
}

// unhurried holds no message back for its time: what is carried over was let
// through, or held, when it was first read.
func unhurried() time.Time { return time.Unix(1<<40, 0) }

// ends asks where a partition ends.
func (f *filling) ends(ctx context.Context, n int) (err error) {
	p := &f.parts[n]
	if p.end, err = f.From.EndOf(ctx, n); err != nil {
		return err
	}
	p.told, err = f.From.LastSummary(ctx, n)
	return err
}

func (f *filling) moved(n int, s partition.Stand) {
	f.mu.Lock()
	f.parts[n].stand = s
	f.mu.Unlock()
	select {
	case f.wake <- struct{}{}:
	default:
	}
}

// watch tells what is to be told, until nothing moves any more.
func (f *filling) watch(ctx context.Context) error {
	for {
		still := f.still()
		told, err := f.tell(ctx)
		switch {
		case err != nil:
			return err
		case told:
			continue
		case still:
			return nil
		}
		select {
		case <-f.wake:
		case <-ctx.Done():
			return context.Cause(ctx)
		}
	}
}

// still reports whether every partition has come to its end, or waits and has
// taken all that others told.
func (f *filling) still() bool {
	f.mu.Lock()
	defer f.mu.Unlock()
	for i := range f.parts {
		p := &f.parts[i]
		if s := p.stand; s.Position < p.end && (!s.Waits || max(s.Position, s.Ahead) < p.told) {
			return false
		}
	}
	return true
}

// tellAtOnce is how many summaries of a partition are told at once.
const tellAtOnce = 200

// tell tells what the stores have to tell, and reports whether there was anything.
func (f *filling) tell(ctx context.Context) (bool, error) {
	var all []store.ToldRow
	last := make([]uint64, len(f.Stores))
	for n, st := range f.Stores {
		rows, err := st.Told(0, tellAtOnce)
		if err != nil {
			return false, err
		}
		if len(rows) > 0 {
			last[n] = rows[len(rows)-1].Number
			all = append(all, rows...)
		}
	}
	if len(all) == 0 {
		return false, nil
	}
	if err := f.Tell(ctx, all); err != nil {
		return false, fmt.Errorf("what partitions have to tell each other: %w", err)
	}
	for n, number := range last {
		if number == 0 {
			continue
		}
		if err := f.Stores[n].DoneTelling(number); err != nil {
			return false, err
		}
	}
	heard := map[int]bool{}
	for i := range all {
		heard[all[i].Partition] = true
	}
	for n := range heard {
		if err := f.ends(ctx, n); err != nil {
			return false, fmt.Errorf("partition %d: %w", n, err)
		}
	}
	return true, nil
}
