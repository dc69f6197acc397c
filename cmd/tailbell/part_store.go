package main

import (
	"context"
	"errors"
	"io/fs"
	"os"

	"tailbell/ingest/bus"
	"tailbell/ingest/claim"
	"tailbell/monitor/store"
)

// openOwnStore opens the store of a partition. Where processes share the
// partitions, one that is not the last owner's is put aside: it may hold what
// the last owner never had.
func (d *daemon) openOwnStore(ctx context.Context, number int, c *claim.Holding) (*store.Store, error) {
	if !d.setup.Bus.Share {
		return openStore(d.setup, number)
	}
	last, err := d.bus.LastPublished(ctx, number)
	if err != nil {
		return nil, err
	}
	path := storePath(d.setup, number)
	if ours, err := isOurs(path, identityOf(d.setup, number)); err != nil {
		return nil, err
	} else if !ours {
		d.log.Info().Int("partition", number).Msg("the store here is from before the stream was divided: it is put aside")
		if err := os.Rename(path, path+staleEnding); err != nil {
			return nil, err
		}
	}
	if _, err := os.Stat(path); !errors.Is(err, fs.ErrNotExist) {
		st, err := store.Open(path, identityOf(d.setup, number), store.Options{})
		if err != nil {
			return nil, err
		}
		epoch, err := st.Epoch()
		if err == nil && isLast(epoch, c, last.Epoch) {
			return st, nil
		}
		if err := errors.Join(err, st.Close()); err != nil {
			return nil, err
		}
		d.log.Info().Int("partition", number).Uint64("epoch", epoch).Uint64("last", max(c.Stored, last.Epoch)).Msg("the store here is not the last owner's: it is put aside")
		if err := os.Rename(path, path+staleEnding); err != nil {
			return nil, err
		}
	}
	return d.foundStore(ctx, number, c)
}

// isOurs reports whether a store, if there is one, is of the stream's present
// partitions.
func isOurs(path string, want store.Identity) (bool, error) {
	st, err := store.OpenReadOnly(path, store.Options{})
	if errors.Is(err, fs.ErrNotExist) {
		return true, nil
	}
	if err != nil {
		return false, err
	}
	found := st.Identity()
	return found == want || !fromDivision(found, want), st.Close()
}

// staleEnding ends the name of a store that was put aside; there is one at most.
const staleEnding = ".stale"

// succeed makes the process the owner of a partition on the bus, from the mark
// in the stream of alerts on, and returns its epoch.
func (d *daemon) succeed(ctx context.Context, p *part, c *claim.Holding) (uint64, error) {
	stored, err := p.store.Epoch()
	if err != nil || c == nil {
		return stored + 1, err
	}
	last, err := d.bus.LastPublished(ctx, p.number)
	if err != nil {
		return 0, err
	}
	epoch, err := d.member.keeper.Raise(ctx, p.number, max(c.Epoch, last.Epoch+1, stored+1))
	if err != nil {
		return 0, err
	}
	p.fence = claim.NewFence(d.bus, p.number, epoch, p.origin, d.setup.Bus.Share)
	if err := p.fence.Take(ctx); err != nil && !errors.Is(err, bus.ErrFull) { // a full stream takes the mark before the next step
		return 0, err
	}
	return epoch, nil
}
