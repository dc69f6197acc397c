// Package outlet delivers the steps of alerts.
//
// Every outlet has its own queue, kept in the store. A step is delivered at
// least once, in order, with an idempotency key by which a repeat is known. An
// outlet that is down delays nothing else: its queue grows until it is back.
package outlet

import (
	"context"
	"fmt"
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

// The pauses between tries grow from the first to the longest.
const (
	firstPause   = 250 * time.Millisecond
	longestPause = time.Minute
)

// Queue delivers what waits for one outlet.
type Queue struct {
	store  *store.Store
	outlet Outlet
	wake   chan struct{}
	// failed is told of every try that failed; it must not block.
	failed func(err error, pause time.Duration)
}

// NewQueue returns the queue of an outlet that is registered with the store.
func NewQueue(st *store.Store, o Outlet, failed func(err error, pause time.Duration)) *Queue {
	return &Queue{store: st, outlet: o, wake: make(chan struct{}, 1), failed: failed}
}

// Wake says that there may be something to deliver.
func (q *Queue) Wake() {
	select {
	case q.wake <- struct{}{}:
	default:
	}
}

// Run delivers until ctx ends or the store fails.
func (q *Queue) Run(ctx context.Context) error {
	pause := firstPause
	for {
		more, err := q.deliver(ctx)
		switch {
		case ctx.Err() != nil:
			return nil
		case err != nil && !more:
			return fmt.Errorf("outlet %s: %w", q.outlet.Name(), err)
		case err != nil:
			q.failed(err, pause)
			if !sleep(ctx, pause) {
				return nil
			}
			pause = min(2*pause, longestPause)
			continue
		}
		pause = firstPause
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
