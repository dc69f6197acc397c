package divide

import (
	"context"
	"errors"
	"fmt"
	"time"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/intake"
	"tailbell/monitor"
	"tailbell/monitor/life"
	"tailbell/monitor/partition"
	"tailbell/monitor/store"
)

// Fill brings a store to the position end of what the source gives. The source
// must begin after the store's position; it is closed.
func Fill(ctx context.Context, st *store.Store, setup *config.Setup, source *bus.Source, end uint64) (err error) {
	engine, err := partition.Recover(st)
	if err != nil {
		return errors.Join(err, source.Close())
	}
	in := intake.Over(source, setup, intake.Options{Stored: monitor.Beginning, Now: unhurried})
	defer func() { err = errors.Join(err, in.Close()) }()
	if engine.Position() >= end {
		return nil
	}
	ctx, stop := context.WithCancel(ctx)
	defer stop()
	loop := partition.New(engine, st, in, partition.Options{Committed: func(position uint64) {
		if position >= end {
			stop()
		}
	}})
	if err := loop.Run(ctx); err != nil {
		return err
	}
	position, err := st.Position()
	if err == nil && position < end {
		err = fmt.Errorf("stopped at position %d of %d: %w", position, end, context.Cause(ctx))
	}
	return err
}

// unhurried holds no message back for its time: what is carried over was let
// through, or held, when it was first read.
func unhurried() time.Time { return time.Unix(1<<40, 0) }

// Handover says what the outlets of new stores need no more.
type Handover struct {
	// pending are the keys of the steps that wait in the old stores, by outlet.
	pending map[string]map[string]bool
}

// most is how many rows are read at once.
const most = 256

// HandoverOf reads which steps wait for which outlet in the old stores.
func HandoverOf(old []*store.Store) (*Handover, error) {
	h := &Handover{pending: map[string]map[string]bool{}}
	for _, st := range old {
		outlets, err := st.OutletState()
		if err != nil {
			return nil, err
		}
		for _, o := range outlets {
			if h.pending[o.Name] == nil {
				h.pending[o.Name] = map[string]bool{}
			}
			err := eachPending(st, o.Name, func(row *store.Row) bool {
				h.pending[o.Name][row.Notice.Key] = true
				return true
			})
			if err != nil {
				return nil, err
			}
		}
	}
	return h, nil
}

// eachPending shows the steps that wait for an outlet, until show returns false.
func eachPending(st *store.Store, outlet string, show func(*store.Row) bool) error {
	for after := uint64(0); ; {
		rows, err := st.PendingAfter(outlet, after, most)
		if err != nil || len(rows) == 0 {
			return err
		}
		for i := range rows {
			if !show(&rows[i]) {
				return nil
			}
			after = rows[i].Number
		}
	}
}

// Register enters the outlets into a new store, before it is filled.
func (h *Handover) Register(st *store.Store) error {
	for name := range h.pending {
		if err := st.Outlets(store.FromOldest, name); err != nil {
			return err
		}
	}
	return nil
}

// Settle lets a new store's outlets begin with the first step that the old ones
// have yet to deliver. Wants says which steps an outlet is told; the others
// count as passed over.
func (h *Handover) Settle(st *store.Store, wants func(outlet string, n *life.Notice) bool) error {
	for name, pending := range h.pending {
		through, passed := uint64(0), uint64(0)
		err := eachPending(st, name, func(row *store.Row) bool {
			if pending[row.Notice.Key] {
				return false
			}
			through = row.Number
			if !wants(name, &row.Notice) {
				passed++
			}
			return true
		})
		if err != nil {
			return err
		}
		if through == 0 {
			continue
		}
		if err := st.Delivered(name, through, passed); err != nil {
			return err
		}
	}
	return nil
}
