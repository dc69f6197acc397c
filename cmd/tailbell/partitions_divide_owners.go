package main

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"os"

	"tailbell/alert/outlet"
	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/claim"
	"tailbell/monitor/store"
)

// readOwners reads what the bus notes of the old partitions' last owners, where
// it is one that processes may share.
func (v *division) readOwners(ctx context.Context) error {
	v.owners = map[int]claim.Row{}
	if v.setup.Bus.URL == "" {
		return nil
	}
	bucket, err := v.bus.Claims(ctx)
	if err != nil {
		return err
	}
	rows, err := claim.Look(ctx, bucket)
	for _, r := range rows {
		v.owners[r.Partition] = r
	}
	return err
}

// oldStore opens the store of an old partition. One that the last owner does not
// have here is made from the stream, in nobody's way: it has come as far as that
// owner noted.
func (v *division) oldStore(n int) (st *store.Store, standIn bool, err error) {
	path := storePath(v.setup, n)
	st, err = store.Open(path, identityOf(v.setup, n), store.Options{})
	if err == nil {
		var epoch uint64
		if epoch, err = st.Epoch(); err == nil && epoch >= v.owners[n].Epoch {
			return st, false, nil
		}
		err = errors.Join(err, st.Close())
	}
	if err != nil && !errors.Is(err, fs.ErrNotExist) {
		return nil, false, err
	}
	st, err = openOrCreate(v.place.stand(n), identityOf(v.setup, n))
	if err != nil {
		return nil, true, err
	}
	for name := range v.owners[n].Told {
		if err := st.Outlets(store.FromOldest, name); err != nil {
			return nil, true, errors.Join(err, st.Close())
		}
	}
	return st, true, nil
}

// catchUpOutlets brings the outlets of a store that stands in for an owner's to
// where that owner noted that they had come.
func (v *division) catchUpOutlets(st *store.Store, n int) error {
	stream, _, err := st.Stream()
	if err != nil || v.owners[n].Origin != originOf(stream, v.bus.Divisions()) {
		return err
	}
	outlets, err := st.OutletState()
	if err != nil {
		return err
	}
	for _, o := range outlets {
		through := min(v.owners[n].Told[o.Name], o.Through+o.Depth)
		if through <= o.Through {
			continue
		}
		if err := st.Delivered(o.Name, through, 0); err != nil {
			return err
		}
	}
	return nil
}

// settleOwners notes on the bus how far the new partitions have come, so that
// whoever owns them first goes on from there: with the store that was made here,
// or one of its own. The old partitions' owners are followed by a new epoch, so
// that nothing of theirs is published any more.
func settleOwners(ctx context.Context, b *bus.Bus, next *config.Setup, place divisionPlace, number uint64) (err error) {
	if next.Bus.URL == "" {
		return nil
	}
	bucket, err := b.Claims(ctx)
	if err != nil {
		return err
	}
	before, err := claim.Look(ctx, bucket)
	if err != nil {
		return err
	}
	epochs := map[int]uint64{}
	for _, r := range before {
		epochs[r.Partition] = r.Epoch
	}
	var rows []claim.Row
	for q := range next.Partitions {
		if _, err := os.Stat(place.draft(q)); errors.Is(err, fs.ErrNotExist) {
			continue // it was settled, and put in place
		}
		r, err := settleOwner(ctx, b, next, place.draft(q), q, epochs[q], number)
		if err != nil {
			return fmt.Errorf("partition %d of %d: %w", q, next.Partitions, err)
		}
		rows = append(rows, *r)
	}
	return claim.Settle(ctx, bucket, rows)
}

func settleOwner(ctx context.Context, b *bus.Bus, next *config.Setup, path string, q int, epoch, number uint64) (r *claim.Row, err error) {
	st, err := store.Open(path, identityOf(next, q), store.Options{})
	if err != nil {
		return nil, err
	}
	defer func() { err = errors.Join(err, st.Close()) }()
	last, err := b.LastPublished(ctx, q)
	if err != nil {
		return nil, err
	}
	stream, _, err := st.Stream()
	if err != nil {
		return nil, err
	}
	r = &claim.Row{Partition: q, Holding: claim.Holding{
		Epoch: max(epoch, last.Epoch) + 1, Stored: max(epoch, last.Epoch) + 1, Origin: originOf(stream, number), Told: map[string]uint64{},
	}}
	if r.Position, err = st.Position(); err != nil {
		return nil, err
	}
	outlets, err := st.OutletState()
	if err != nil {
		return nil, err
	}
	for _, o := range outlets {
		r.Told[o.Name] = o.Through
	}
	mark := &bus.OwnerMessage{Partition: q, Published: bus.Published{
		Position: last.Position, Epoch: r.Epoch, Row: r.Told[outlet.BusName], Origin: r.Origin,
	}}
	if _, _, err := b.PublishOwned(ctx, mark); err != nil {
		return nil, err
	}
	return r, st.SetEpoch(r.Epoch)
}
