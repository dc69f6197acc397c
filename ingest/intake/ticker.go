package intake

import (
	"context"
	"time"

	"tailbell/monitor"
)

// patience is how long to wait for a tick to show effect before another one is
// published, and how long to wait after one could not be.
const patience = 2 * time.Second

// Ticker publishes an empty tick when a look is due and the stream is silent,
// so that looks are made in time.
type Ticker struct {
	// Due returns when the next look falls due; monitor.Never for none.
	Due func() monitor.Instant
	// Publish publishes a tick.
	Publish func(ctx context.Context) error
	// Failed is told when a tick could not be published.
	Failed func(error)

	wake chan struct{}
}

// NewTicker returns a ticker.
func NewTicker(due func() monitor.Instant, publish func(context.Context) error, failed func(error)) *Ticker {
	return &Ticker{Due: due, Publish: publish, Failed: failed, wake: make(chan struct{}, 1)}
}

// Wake says that Due may return something else now.
func (t *Ticker) Wake() {
	select {
	case t.wake <- struct{}{}:
	default:
	}
}

// Run publishes ticks until ctx ends.
func (t *Ticker) Run(ctx context.Context) {
	for ctx.Err() == nil {
		due := t.Due()
		if due == monitor.Never {
			t.wait(ctx, -1)
			continue
		}
		if ahead := time.Until(due.Time()); ahead > 0 {
			t.wait(ctx, ahead)
			continue
		}
		if err := t.Publish(ctx); err != nil && ctx.Err() == nil {
			t.Failed(err)
		}
		t.wait(ctx, patience)
	}
}

// wait waits for so long (for ever if negative), or until it is woken.
func (t *Ticker) wait(ctx context.Context, d time.Duration) {
	var after <-chan time.Time
	if d >= 0 {
		timer := time.NewTimer(d)
		defer timer.Stop()
		after = timer.C
	}
	select {
	case <-after:
	case <-t.wake:
	case <-ctx.Done():
	}
}
