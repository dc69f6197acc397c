package main

import (
	"context"
	"time"

	"github.com/rs/zerolog"

	"tailbell/ingest/bus"
	"tailbell/monitor/store"
)

// teller publishes what a partition has to tell to others: to those that gather
// sums over several, and to those with which it counts. The store keeps it until the bus has it; what is published again is
// known there. So it needs no fence: whoever owns the partition tells the same.
type teller struct {
	store *store.Store
	bus   *bus.Bus
	log   zerolog.Logger
	wake  chan struct{}
	// through is the last row that the bus has, done the last that the store no
	// longer keeps.
	through, done uint64
}

const (
	// tellBatch is the most summaries that are published at once.
	tellBatch = 200
	// tellAgain is how long to wait after they could not be.
	tellAgain = 2 * time.Second
	// letGoAfter is how long nothing more is told before the store lets go of what
	// was, and letGoMost how many rows it keeps at most meanwhile. While partitions
	// wait for each other they tell a little, many times: each write would have all
	// of them wait. What is told again after a crash is known.
	letGoAfter = 100 * time.Millisecond
	letGoMost  = 1000
)

func newTeller(st *store.Store, b *bus.Bus, log zerolog.Logger) *teller {
	return &teller{store: st, bus: b, log: log.With().Int("partition", st.Identity().Partition).Logger(), wake: make(chan struct{}, 1)}
}

// Wake says that there may be something to tell.
func (t *teller) Wake() {
	select {
	case t.wake <- struct{}{}:
	default:
	}
}

// Run tells until ctx ends.
func (t *teller) Run(ctx context.Context) {
	defer t.letGo()
	for ctx.Err() == nil {
		told, err := t.tell(ctx)
		switch {
		case err != nil && ctx.Err() == nil:
			t.log.Error().Err(err).Msg("telling other partitions")
			t.wait(ctx, nil, time.After(tellAgain))
		case told:
		case t.through > t.done:
			if !t.wait(ctx, t.wake, time.After(letGoAfter)) {
				t.letGo()
			}
		default:
			t.wait(ctx, t.wake, nil)
		}
	}
}

// wait waits, and reports whether it was woken.
func (t *teller) wait(ctx context.Context, wake <-chan struct{}, until <-chan time.Time) bool {
	select {
	case <-wake:
		return true
	case <-until:
	case <-ctx.Done():
	}
	return false
}

// tell publishes the next summaries, and reports whether there were any.
func (t *teller) tell(ctx context.Context) (bool, error) {
	rows, err := t.store.Told(t.through, tellBatch)
	if err != nil || len(rows) == 0 {
		return false, err
	}
	messages := make([]bus.Outgoing, len(rows))
	for i, row := range rows {
		messages[i] = summaryOf(&row)
	}
	stored, err := t.bus.PublishInOrder(ctx, messages)
	if stored > 0 {
		t.through = rows[stored-1].Number
	}
	if t.through > t.done+letGoMost {
		t.letGo()
	}
	return true, err
}

// letGo has the store forget what the bus has.
func (t *teller) letGo() {
	if t.through <= t.done {
		return
	}
	if err := t.store.DoneTelling(t.through); err != nil {
		t.log.Error().Err(err).Msg("letting go of what other partitions were told")
		return
	}
	t.done = t.through
}

// summaryOf is the message that tells another partition what a row says.
func summaryOf(row *store.ToldRow) bus.Outgoing {
	return bus.Outgoing{Partition: row.Partition, Kind: bus.Summary, Data: row.Data}
}
