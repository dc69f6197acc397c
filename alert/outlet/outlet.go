// Package outlet delivers the steps of alerts.
//
// Every outlet has its own queue, kept in the store. A step is delivered at
// least once, in order, with an idempotency key by which a repeat is known. An
// outlet that is down delays nothing else: its queue grows until it is back.
package outlet

import (
	"context"
	"errors"
	"fmt"
	"math/rand/v2"
	"sync"
	"time"

	"tailbell/monitor/life"
	"tailbell/monitor/store"
)

// Outlet is one way out.
type Outlet interface {
	// Name names the outlet and its queue.
	Name() string
	// Deliver delivers one step. An error means that it must be tried again.
	Deliver(ctx context.Context, n *life.Notice) error
}

// chunk is how many steps are delivered before the store hears of it.
const chunk = 100

// The pauses between tries grow from the first to the longest. Each is drawn
// from its upper half, so that many senders do not come back at once.
const (
	firstPause   = 250 * time.Millisecond
	longestPause = time.Minute
)

// Queue delivers what waits for one outlet.
type Queue struct {
	store  *store.Store
	outlet Outlet
	wake   chan struct{}
	opts   QueueOptions

	mu struct {
		sync.Mutex
		trouble Trouble
	}
}

// QueueOptions adjust a Queue.
type QueueOptions struct {
	// Random spreads the pauses between tries. It must be the queue's own.
	Random *rand.Rand
	// Failed, if not nil, is told of every try that failed; it must not block.
	Failed func(err error, pause time.Duration)
}

// Trouble says why an outlet delivers nothing at present. The zero value means
// that nothing is wrong.
type Trouble struct {
	// Tries have failed one after the other, the last with Error; Pause is
	// then waited before the next.
	Tries int
	Error string
	Pause time.Duration
}

// NewQueue returns the queue of an outlet that is registered with the store.
func NewQueue(st *store.Store, o Outlet, opts QueueOptions) *Queue {
	if opts.Failed == nil {
		opts.Failed = func(error, time.Duration) {}
	}
	return &Queue{store: st, outlet: o, wake: make(chan struct{}, 1), opts: opts}
}

// Name is the outlet's name.
func (q *Queue) Name() string { return q.outlet.Name() }

// Trouble returns why nothing is delivered, if so. It may be called at any
// time.
func (q *Queue) Trouble() Trouble {
	q.mu.Lock()
	defer q.mu.Unlock()
	return q.mu.trouble
}

// Wake says that there may be something to deliver.
func (q *Queue) Wake() {
	select {
	case q.wake <- struct{}{}:
	default:
	}
}

// Run delivers until ctx ends or the store fails. A store without room is
// waited for like an outlet that is down.
func (q *Queue) Run(ctx context.Context) error {
	for {
		more, err := q.deliver(ctx)
		if ctx.Err() != nil {
			return nil //nolint:nilerr // ended, not failed: what waits stays in the store
		}
		switch {
		case err != nil && !more && !errors.Is(err, store.ErrFull):
			return fmt.Errorf("outlet %s: %w", q.outlet.Name(), err)
		case err != nil:
			pause := q.fail(err)
			q.opts.Failed(err, pause)
			if !sleep(ctx, pause) {
				return nil
			}
			continue
		}
		q.well()
		if more {
			continue
		}
		select {
		case <-q.wake:
		case <-ctx.Done():
			return nil
		}
	}
}

// fail notes a try that failed and returns how long to wait.
func (q *Queue) fail(err error) time.Duration {
	q.mu.Lock()
	defer q.mu.Unlock()
	t := &q.mu.trouble
	full := longestPause
	if t.Tries < 8 {
		full = min(longestPause, firstPause<<t.Tries)
	}
	t.Tries++
	t.Error = err.Error()
	t.Pause = full/2 + time.Duration(q.opts.Random.Int64N(int64(full/2)+1))
	return t.Pause
}

func (q *Queue) well() {
	q.mu.Lock()
	defer q.mu.Unlock()
	q.mu.trouble = Trouble{}
}

// Flush delivers what waits, once, and returns the first error.
func (q *Queue) Flush(ctx context.Context) error {
	for {
		more, err := q.deliver(ctx)
		if err != nil || !more {
			return err
		}
	}
}

// deliver delivers the next chunk. more reports whether there may be another
// try: after an error of the outlet, or if there was anything to deliver.
func (q *Queue) deliver(ctx context.Context) (more bool, err error) {
	rows, err := q.store.Pending(q.outlet.Name(), chunk)
	if err != nil {
		return false, err
	}
	var failure error
	var done uint64
	for i := range rows {
		if failure = q.outlet.Deliver(ctx, &rows[i].Notice); failure != nil {
			break
		}
		done = rows[i].Number
	}
	if done > 0 {
		if err := q.store.Delivered(q.outlet.Name(), done); err != nil {
			return false, err
		}
		q.well()
	}
	return len(rows) > 0, failure
}

func sleep(ctx context.Context, d time.Duration) bool {
	t := time.NewTimer(d)
	defer t.Stop()
	select {
	case <-t.C:
		return true
	case <-ctx.Done():
		return false
	}
}
