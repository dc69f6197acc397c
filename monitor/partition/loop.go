// Package partition runs one partition: messages in, transactions out.
//
// A Loop has three stages that overlap: one pulls and decodes batches, one
// applies them to the engine, one commits what came of them to the store. At
// most one batch waits between any two. The size of a commit follows the load:
// a single message when the stream is idle, thousands when it is behind.
// Batches are only units of commit; they change no result.
//
// In history time a message may have to wait until other partitions have told
// how far they are. Then what came before it is committed, so that what this
// partition has to tell goes out, and what the others tell is looked for further
// on in the stream, past what waits: see Ahead. Only one batch waits meanwhile, and
// one more behind it.
//
// The engine belongs to the applying stage alone; Do lets others look at it
// between batches. Nothing leaves the process before it is committed: the
// outlets read the store.
package partition

import (
	"context"
	"errors"
	"fmt"
	"sync"
	"sync/atomic"

	"tailbell/monitor"
	"tailbell/monitor/life"
	"tailbell/monitor/store"
)

// Batch is a run of messages of the stream, in order.
type Batch struct {
	Messages []monitor.Message
	// Mark returns the mark of one of them.
	Mark func(i int) store.Mark
}

// Source gives the messages of one partition after the stored position.
type Source interface {
	// Next waits until there is at least one message, then returns what is
	// there, at most limit.
	Next(ctx context.Context, limit int) (Batch, error)
}

// Options adjust a Loop.
type Options struct {
	// MaxBatch is the largest number of messages in a commit; 0 means 5000.
	MaxBatch int
	// Committed, if not nil, is called after every commit, with 0 for one that
	// moved no position.
	Committed func(position uint64)
	// Ahead begins to read what other partitions told, beside the source. Without it
	// a message that must wait for them ends the loop.
	Ahead func(ctx context.Context, after uint64) (Ahead, error)
	// Moved, if not nil, is told where the loop stands after every commit, and while
	// it waits for other partitions also after what it has taken from ahead, if
	// nothing of that is to be committed at once.
	Moved func(Stand)
	// Full, if not nil, is called when the store has no room; it returns when
	// the commit is to be tried again, or with an error to give up.
	Full func(ctx context.Context, err error) error
}

// Loop runs one partition.
type Loop struct {
	engine *monitor.Engine
	store  *store.Store
	source Source
	opts   Options

	batches chan Batch
	commits chan commit
	free    chan struct{} // the committing stage takes another one
	asks    chan func(*monitor.Engine)
	due     atomic.Int64
}

type commit struct {
	changes monitor.Changes
	mark    store.Mark
	stand   Stand
}

// Stand is where a loop stands, as far as it is committed.
type Stand struct {
	Position uint64
	// Ahead is the position up to which it has taken what others told. While it
	// waits that may not be committed yet.
	Ahead uint64
	// Waits says that the next message must wait for other partitions.
	Waits bool
}

// New returns the loop of an engine that stands where the store does.
func New(engine *monitor.Engine, st *store.Store, source Source, opts Options) *Loop {
	if opts.MaxBatch == 0 {
		opts.MaxBatch = 5000
	}
	l := &Loop{
		engine: engine, store: st, source: source, opts: opts,
		batches: make(chan Batch, 1), commits: make(chan commit), free: make(chan struct{}, 1),
		asks: make(chan func(*monitor.Engine)),
	}
	l.noteDue()
	return l
}

// Due returns when the next look falls due by the bus's clock; monitor.Never
// if none will, or in history time. It may be called at any time.
func (l *Loop) Due() monitor.Instant { return monitor.Instant(l.due.Load()) }

func (l *Loop) noteDue() {
	due, ok := l.engine.NextDue()
	if !ok || l.engine.InHistory() {
		due = monitor.Never
	}
	l.due.Store(int64(due))
}

// Recover returns the engine that goes on from what the store holds.
func Recover(st *store.Store) (*monitor.Engine, error) {
	snap, err := st.Snapshot()
	if err != nil {
		return nil, err
	}
	id := st.Identity()
	p := monitor.Partition{Number: id.Partition, Of: id.Partitions, KeyParts: id.KeyParts}
	return monitor.Restore(p, &snap, func(id string) (life.Record, error) {
		row, err := st.Alert(id)
		return row.Record, err
	})
}

// Run runs the stages until ctx ends or one of them fails. When ctx ends, what
// was applied is still committed, and Run returns nil.
func (l *Loop) Run(ctx context.Context) error {
	run, stop := context.WithCancelCause(ctx)
	defer stop(nil)
	var stages sync.WaitGroup
	stages.Go(func() {
		if err := l.pull(run); run.Err() == nil {
			stop(fmt.Errorf("partition: reading: %w", err))
		}
	})
	stages.Go(func() {
		if err := l.commit(context.WithoutCancel(ctx)); err != nil {
			stop(fmt.Errorf("partition: committing: %w", err))
		}
	})
	l.apply(run, func(err error) { stop(fmt.Errorf("partition: reading ahead: %w", err)) })
	close(l.commits)
	stages.Wait()
	if ctx.Err() != nil && errors.Is(context.Cause(run), context.Cause(ctx)) {
		return nil
	}
	return context.Cause(run)
}

// Do runs look on the engine between batches, or returns ctx's error.
func (l *Loop) Do(ctx context.Context, look func(*monitor.Engine)) error {
	done := make(chan struct{})
	ask := func(e *monitor.Engine) { defer close(done); look(e) }
	select {
	case l.asks <- ask:
		<-done
		return nil
	case <-ctx.Done():
		return ctx.Err()
	}
}

// pull reads until the source fails or ctx ends.
func (l *Loop) pull(ctx context.Context) error {
	for {
		b, err := l.source.Next(ctx, l.opts.MaxBatch)
		if err != nil {
			return err
		}
		select {
		case l.batches <- b:
		case <-ctx.Done():
			return ctx.Err()
		}
	}
}

func (l *Loop) commit(ctx context.Context) error {
	defer close(l.free)
	l.free <- struct{}{}
	for c := range l.commits {
		if err := l.write(ctx, c); err != nil {
			return err
		}
		if l.opts.Committed != nil {
			l.opts.Committed(c.changes.Position)
		}
		l.moved(c.stand)
		l.free <- struct{}{}
	}
	return nil
}

func (l *Loop) moved(s Stand) {
	if l.opts.Moved != nil {
		l.opts.Moved(s)
	}
}

func (l *Loop) write(ctx context.Context, c commit) error {
	for {
		err := l.store.Commit(c.changes, c.mark)
		if err == nil || !errors.Is(err, store.ErrFull) || l.opts.Full == nil {
			return err
		}
		if err := l.opts.Full(ctx, err); err != nil {
			return err
		}
	}
}
