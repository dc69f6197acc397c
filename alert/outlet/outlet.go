// Package outlet delivers the steps of alerts.
//
// Every outlet has its own queue, kept in the store. A step is delivered at
// least once, in order per alert, with an idempotency key by which a repeat is
// known. An outlet that is down delays nothing else: its queue grows until it
// is back, or until a person lets go of what waits.
//
// Outlets for programs (bus, webhook) get one event a step. Outlets for people
// (mail, command) are Gatherers: what happened to many series of one indicator
// at the same time arrives as one notice. That is decided when it is delivered;
// records know nothing of it.
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

// Outlet is one way out. Its methods may be called concurrently.
type Outlet interface {
	// Name names the outlet and its queue.
	Name() string
	// Deliver delivers one step. An error means that it must be tried again.
	Deliver(ctx context.Context, n *life.Notice) error
}

// Numbered is an outlet that is told which step of the outbox it delivers.
type Numbered interface {
	Outlet
	// DeliverNumbered is Deliver of the step with a number.
	DeliverNumbered(ctx context.Context, number uint64, n *life.Notice) error
}

// Gatherer is an outlet for people.
type Gatherer interface {
	Outlet
	// DeliverTogether delivers several steps of one kind, taken by themselves at
	// the same time on different alerts of one indicator and direction, as one
	// notice.
	DeliverTogether(ctx context.Context, notices []*life.Notice) error
}

// Forgiving is an outlet whose receiver drops repeats unseen. That a step was
// delivered may become durable with whatever is written next: a crash before
// that repeats it.
type Forgiving interface {
	Outlet
	// Forgives says nothing but that it is so.
	Forgives()
}

// chunk is how many steps are looked at before the store hears of what was
// delivered.
const chunk = 256

// The pauses between tries grow from the first to the longest. Each is drawn
// from its upper half, so that many senders do not come back at once.
const (
	firstPause   = 250 * time.Millisecond
	longestPause = time.Minute
)

// lull is how long nothing is written before a forgiving outlet's delivery is
// made durable by itself.
const lull = 25 * time.Millisecond

// Queue delivers what waits for one outlet.
type Queue struct {
	store  *store.Store
	outlet Outlet
	wake   chan struct{}
	again  chan struct{}
	opts   QueueOptions
	// done are the numbers of steps that were delivered, while one before them
	// was not.
	done map[uint64]bool
	// unkept says that something was delivered since it was last made durable for
	// certain.
	unkept bool

	mu struct {
		sync.Mutex
		trouble Trouble
	}
}

// QueueOptions adjust a Queue.
type QueueOptions struct {
	// Random spreads the pauses between tries. It must be the queue's own.
	Random *rand.Rand
	// Wants says which steps the outlet is told; nil for all. The others are
	// passed over.
	Wants func(*life.Notice) bool
	// Through is the number of the outbox up to which all was done with already,
	// by another process that had the partition before.
	Through uint64
	// May is asked right before every delivery, if not nil; an error puts it off.
	May func() error
	// Now tells the time of the next try for those who ask; nil for none.
	Now func() time.Time
	// Failed, if not nil, is told of every try that failed; it must not block.
	Failed func(err error, pause time.Duration)
}

// Trouble says why an outlet delivers nothing at present. The zero value means
// that nothing is wrong.
type Trouble struct {
	// Tries have failed one after the other, the last with Error; Pause is
	// then waited before the next, which is made at Next.
	Tries int
	Error string
	Pause time.Duration
	Next  time.Time
}

// NewQueue returns the queue of an outlet that is registered with the store.
func NewQueue(st *store.Store, o Outlet, opts QueueOptions) *Queue {
	if opts.Failed == nil {
		opts.Failed = func(error, time.Duration) {}
	}
	if opts.Wants == nil {
		opts.Wants = func(*life.Notice) bool { return true }
	}
	return &Queue{store: st, outlet: o, wake: make(chan struct{}, 1), again: make(chan struct{}, 1), opts: opts, done: map[uint64]bool{}}
}

// Name is the outlet's name.
func (q *Queue) Name() string { return q.outlet.Name() }

// Try delivers a notice at once, past what waits: a test of the way out.
func (q *Queue) Try(ctx context.Context, n *life.Notice) error { return q.outlet.Deliver(ctx, n) }

// Waiting counts the steps that wait to be told, up to a number of steps looked
// at, and returns the key of the first; more says that there are further ones.
func (q *Queue) Waiting(most int) (count int, first string, more bool, err error) {
	after := uint64(0)
	for looked := 0; ; {
		rows, err := q.store.PendingAfter(q.Name(), after, chunk)
		if err != nil || len(rows) == 0 {
			return count, first, false, err
		}
		for i := range rows {
			if after = rows[i].Number; q.opts.Wants(&rows[i].Notice) {
				if count++; first == "" {
					first = rows[i].Notice.Key
				}
			}
		}
		if looked += len(rows); looked >= most {
			return count, first, true, nil
		}
	}
}

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

// Again cuts the pause before the next try short: a person has changed what
// waits.
func (q *Queue) Again() {
	select {
	case q.again <- struct{}{}:
	default:
	}
	q.Wake()
}

// Run delivers until ctx ends or the store fails. A store without room is
// waited for like an outlet that is down.
func (q *Queue) Run(ctx context.Context) error {
	for ctx.Err() == nil {
		more, err := q.deliver(ctx)
		if err == nil && !more {
			q.well()
			err = q.idle(ctx)
		}
		switch {
		case ctx.Err() != nil: // ended, not failed: what waits stays in the store
		case err != nil && !more && !errors.Is(err, store.ErrFull):
			return fmt.Errorf("outlet %s: %w", q.outlet.Name(), err)
		case err != nil:
			pause := q.fail(err)
			q.opts.Failed(err, pause)
			q.sleep(ctx, pause)
		case more:
			q.well()
		}
	}
	if err := q.keep(); err != nil && !errors.Is(err, store.ErrFull) {
		return fmt.Errorf("outlet %s: %w", q.outlet.Name(), err)
	}
	return nil
}

// idle waits until there may be something to deliver. What was delivered becomes
// durable meanwhile, if no other write came.
func (q *Queue) idle(ctx context.Context) error {
	var quiet <-chan time.Time
	if q.unkept {
		timer := time.NewTimer(lull)
		defer timer.Stop()
		quiet = timer.C
	}
	select {
	case <-q.wake:
		return nil
	case <-quiet:
		return q.keep()
	case <-ctx.Done():
		return nil
	}
}

// keep makes durable what was delivered.
func (q *Queue) keep() error {
	if !q.unkept {
		return nil
	}
	err := q.store.KeepDelivered()
	q.unkept = err != nil
	return err
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
	if q.opts.Now != nil {
		t.Next = q.opts.Now().Add(t.Pause).UTC()
	}
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
			return errors.Join(err, q.keep())
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
	parcels, through := q.pack(rows)
	var failure error
	for _, p := range parcels {
		if failure = q.send(ctx, &p); failure != nil {
			through = p.before
			break
		}
	}
	if through > 0 {
		passed := uint64(0)
		for i := range rows {
			if rows[i].Number <= through && !q.opts.Wants(&rows[i].Notice) {
				passed++
			}
		}
		if err := q.delivered(through, passed); err != nil {
			return false, err
		}
		for n := range q.done {
			if n <= through {
				delete(q.done, n)
			}
		}
		q.well()
	}
	return len(rows) > 0, failure
}

// delivered lets the store hear that all steps up to a number are done with.
func (q *Queue) delivered(through, passed uint64) error {
	if _, forgives := q.outlet.(Forgiving); !forgives {
		return q.store.Delivered(q.outlet.Name(), through, passed)
	}
	q.unkept = true
	return q.store.DeliveredSoon(q.outlet.Name(), through, passed)
}

// send delivers of a parcel what was not delivered before, when something ahead
// of it failed.
func (q *Queue) send(ctx context.Context, p *parcel) (err error) {
	var notices []*life.Notice
	var last uint64
	for i, n := range p.numbers {
		if !q.done[n] && n > q.opts.Through {
			notices, last = append(notices, p.notices[i]), n
		}
	}
	if len(notices) == 0 {
		return nil
	}
	if q.opts.May != nil {
		if err := q.opts.May(); err != nil {
			return err
		}
	}
	together, gathers := q.outlet.(Gatherer)
	numbered, counts := q.outlet.(Numbered)
	switch {
	case counts && len(notices) == 1:
		err = numbered.DeliverNumbered(ctx, last, notices[0])
	case gathers && len(notices) > 1:
		err = together.DeliverTogether(ctx, notices)
	default: // one: nothing else is made of more
		err = q.outlet.Deliver(ctx, notices[0])
	}
	if err != nil {
		return err
	}
	for _, n := range p.numbers {
		q.done[n] = true
	}
	return nil
}

// sleep waits for a pause, until it is cut short or ctx ends.
func (q *Queue) sleep(ctx context.Context, d time.Duration) {
	t := time.NewTimer(d)
	defer t.Stop()
	select {
	case <-q.again:
	case <-t.C:
	case <-ctx.Done():
	}
}
