package main

import (
	"context"
	"time"

	"github.com/rs/zerolog"

	"tailbell/ingest/bus"
	"tailbell/monitor/store"
)

// teller publishes what a partition has to tell to those that gather sums over
// several. The store keeps it until the bus has it; what is published again is
// known there. So it needs no fence: whoever owns the partition tells the same.
type teller struct {
	store *store.Store
	bus   *bus.Bus
	log   zerolog.Logger
	wake  chan struct{}
}

const (
	// tellBatch is the most summaries that are published at once.
	tellBatch = 200
	// tellAgain is how long to wait after they could not be.
	tellAgain = 2 * time.Second
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
	for ctx.Err() == nil {
		told, err := t.tell(ctx)
		switch {
		case err != nil && ctx.Err() == nil:
			t.log.Error().Err(err).Msg("telling the partitions that gather sums")
			t.wait(ctx, time.After(tellAgain))
		case !told:
			t.wait(ctx, nil)
		}
	}
}

func (t *teller) wait(ctx context.Context, until <-chan time.Time) {
	wake := t.wake
	if until != nil {
		wake = nil
	}
	select {
	case <-wake:
	case <-until:
	case <-ctx.Done():
	}
}

// tell publishes the next summaries, and reports whether there were any.
func (t *teller) tell(ctx context.Context) (bool, error) {
	rows, err := t.store.Told(0, tellBatch)
	if err != nil || len(rows) == 0 {
		return false, err
	}
	messages := make([]bus.Outgoing, len(rows))
	for i, row := range rows {
		messages[i] = summaryOf(&row)
	}
	stored, err := t.bus.PublishBatch(ctx, messages)
	if stored > 0 {
		if done := t.store.DoneTelling(rows[stored-1].Number); done != nil {
			return true, done
		}
	}
	return true, err
}

// summaryOf is the message that tells another partition what a row says.
func summaryOf(row *store.ToldRow) bus.Outgoing {
	return bus.Outgoing{Partition: row.Partition, Kind: bus.Summary, Data: row.Data}
}
