package main

import (
	"context"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"time"

	"tailbell/ingest/bus"
	"tailbell/ingest/claim"
	"tailbell/ingest/control"
	"tailbell/ingest/copies"
	"tailbell/monitor/store"
)

// copyEndings end the names of files that are on their way to the bus or from
// it.
const (
	outEnding = ".out"
	inEnding  = ".in"
)

// copyTime is how long a copy may take to go up before the partition goes on, or
// is handed over, without it.
const copyTime = 30 * time.Second

// keepCopying puts copies of a partition's store on the bus, until ctx ends.
func (m *member) keepCopying(ctx context.Context, p *part) {
	m.knowCopy(ctx, p)
	tick := time.NewTicker(m.d.setup.Bus.CopyEvery)
	defer tick.Stop()
	for {
		select {
		case <-tick.C:
			m.copyUp(ctx, p)
		case <-p.copyNow:
			p.copied.Store(0) // what a person did moves no position
			m.copyUp(ctx, p)
		case <-ctx.Done():
			return
		}
	}
}

// letGo sees that a copy is made soon that has what a person let go: it stands in
// the store only. Nothing is copied where no processes share the partitions.
func (p *part) letGo() {
	select {
	case p.copyNow <- struct{}{}:
	default:
	}
}

// knowCopy notes the last copy that the owner before has put on the bus, for
// people.
func (m *member) knowCopy(ctx context.Context, p *part) {
	ctx, cancel := context.WithTimeout(ctx, goodbye)
	defer cancel()
	list, err := copies.List(ctx, m.shelf, p.number)
	if err != nil {
		m.d.log.Debug().Err(err).Int("partition", p.number).Msg("asking for the copies on the bus")
	}
	for i := range list {
		if list[i].Origin == p.origin {
			p.lastCopy.CompareAndSwap(nil, &list[i])
			return
		}
	}
}

// sweepEvery is how often parts of copies are looked for that never became
// whole.
const sweepEvery = 10 * time.Minute

// keepSweeping removes what processes that died have left of copies, until ctx
// ends.
func (m *member) keepSweeping(ctx context.Context) {
	tick := time.NewTicker(sweepEvery)
	defer tick.Stop()
	var strays map[string]bool
	for {
		select {
		case <-tick.C:
		case <-ctx.Done():
			return
		}
		within, cancel := context.WithTimeout(ctx, copyTime)
		var gone int
		var err error
		strays, gone, err = copies.Sweep(within, m.shelf, m.d.setup.Partitions, strays)
		cancel()
		if err != nil && ctx.Err() == nil {
			m.d.log.Warn().Err(err).Msg("sweeping up what is left of copies")
		} else if gone > 0 {
			m.d.log.Info().Int("copies", gone).Msg("swept up what was left of copies that never became whole")
		}
	}
}

// copyUp puts a copy on the bus, unless the last one reaches as far.
func (m *member) copyUp(ctx context.Context, p *part) {
	ctx, cancel := context.WithTimeout(ctx, copyTime)
	defer cancel()
	select {
	case m.copying <- struct{}{}: // one at a time
		defer func() { <-m.copying }()
	case <-ctx.Done():
		return
	}
	c, err := m.copyOnce(ctx, p)
	switch {
	case err != nil && ctx.Err() == nil:
		m.d.log.Warn().Err(err).Int("partition", p.number).Msg("copying the store to the bus")
	case err == nil && c != nil:
		m.d.log.Debug().Int("partition", p.number).Uint64("position", c.Position).Int64("bytes", c.Bytes).Msg("copied the store to the bus")
	}
}

func (m *member) copyOnce(ctx context.Context, p *part) (c *copies.Copy, err error) {
	position, err := p.store.Position()
	if err != nil || position == p.copied.Load() {
		return nil, err
	}
	file := storePath(m.d.setup, p.number) + outEnding
	if err := errors.Join(removeIfThere(file), removeIfThere(file+".*")); err != nil {
		return nil, err
	}
	if _, err := p.store.CopyTo(file); err != nil {
		return nil, err
	}
	defer func() { err = errors.Join(err, os.Remove(file)) }()
	c = &copies.Copy{Partition: p.number, Origin: p.origin, Digest: m.d.setup.Digest, Made: time.Now()}
	if c.Position, c.Epoch, err = standOf(file); err != nil {
		return nil, err
	}
	if err := copies.Save(ctx, m.shelf, file, c); err != nil {
		return nil, err
	}
	p.copied.Store(c.Position)
	p.lastCopy.Store(c)
	return c, nil
}

// renewCopies makes sure that the partition can do without what lies up to a
// position: a copy is made that reaches there, or to the partition's end, and those
// that do not are removed.
func (m *member) renewCopies(ctx context.Context, p *part, through uint64) error {
	end, err := m.d.bus.EndOf(ctx, p.number)
	if err != nil {
		return err
	}
	m.copyUp(ctx, p)
	list, err := copies.List(ctx, m.shelf, p.number)
	if err != nil {
		return err
	}
	needed := min(through, end)
	if len(list) == 0 || list[0].Position < needed || list[0].Origin != p.origin {
		return control.Errorf(codeRefused, "no copy of partition %d on the bus reaches to position %d: the log says why, if that stays so", p.number, needed)
	}
	for i := range list[1:] {
		if c := &list[1+i]; c.Position < needed || c.Origin != p.origin {
			if err := copies.Drop(ctx, m.shelf, c); err != nil {
				return err
			}
		}
	}
	return nil
}

// standOf returns where the store in a file stands.
func standOf(file string) (position, epoch uint64, err error) {
	st, err := store.OpenReadOnly(file, store.Options{})
	if err != nil {
		return 0, 0, err
	}
	position, err = st.Position()
	if err == nil {
		epoch, err = st.Epoch()
	}
	return position, epoch, errors.Join(err, st.Close())
}

// removeIfThere removes the files of a pattern.
func removeIfThere(pattern string) error {
	files, err := filepath.Glob(pattern)
	for _, file := range files {
		err = errors.Join(err, os.Remove(file))
	}
	return err
}

// foundStore begins with the copy on the bus that reaches furthest, else from the
// beginning of the stream; as a last resort with what was put aside here.
func (d *daemon) foundStore(ctx context.Context, number int, c *claim.Holding) (*store.Store, error) {
	id, err := d.bus.Identity(ctx)
	if err != nil {
		return nil, err
	}
	origin := originOf(store.StreamIdentity{Name: id.Stream, Created: id.Created}, d.bus.Divisions())
	if c.Origin == origin && c.Position > id.Last {
		return nil, fmt.Errorf("%w: the stream ends at position %d, but the owner before had counted up to %d, which a copy of before would hide. "+
			"Start tailbell run on that machine (its store has epoch %d): it says what is lost, and tailbell store accept there is the way on",
			bus.ErrBeyondEnd, id.Last, c.Position, c.Stored)
	}
	list, err := copies.List(ctx, d.member.shelf, number)
	if err != nil {
		return nil, err
	}
	reaches := func(position uint64) bool { return position+1 >= id.First && position <= id.Last }
	for i := range list {
		c := &list[i]
		if c.Origin != origin || !reaches(c.Position) {
			d.log.Warn().Int("partition", number).Uint64("position", c.Position).Uint64("first", id.First).Uint64("last", id.Last).Msg("a copy on the bus does not fit the stream: it is passed over")
			continue
		}
		st, err := d.fetchStore(ctx, number, c)
		if err == nil {
			d.log.Info().Int("partition", number).Uint64("position", c.Position).Uint64("of_epoch", c.Epoch).Msg("going on from a copy")
			return st, nil
		}
		if !unfitCopy(err) {
			return nil, err
		}
		d.log.Error().Err(err).Int("partition", number).Msg("a copy on the bus is of no use: the one before is tried")
	}
	if id.First <= d.bus.Begins() || id.Last == 0 {
		return store.Create(storePath(d.setup, number), identityOf(d.setup, number), store.Options{})
	}
	return d.lastResort(number, id.First, reaches)
}

// unfitCopy reports whether an error says that a copy is of no use.
func unfitCopy(err error) bool {
	for _, one := range []error{copies.ErrDamaged, store.ErrDamaged, store.ErrForeign, store.ErrIdentity, store.ErrFormatTooNew} {
		if errors.Is(err, one) {
			return true
		}
	}
	return false
}

// fetchStore puts a copy in the place of the partition's store, and opens it.
func (d *daemon) fetchStore(ctx context.Context, number int, c *copies.Copy) (*store.Store, error) {
	path := storePath(d.setup, number)
	file := path + inEnding
	if err := removeIfThere(file); err != nil {
		return nil, err
	}
	if err := copies.Fetch(ctx, d.member.shelf, c, file); err != nil {
		return nil, err
	}
	position, _, err := standOf(file)
	if err == nil && position != c.Position {
		err = fmt.Errorf("it stands at position %d, said was %d: %w", position, c.Position, copies.ErrDamaged)
	}
	if err == nil {
		err = os.Rename(file, path)
	}
	if err != nil {
		return nil, errors.Join(err, removeIfThere(file))
	}
	st, err := store.Open(path, identityOf(d.setup, number), store.Options{})
	if err != nil { // not to be taken for a store of our own
		return nil, errors.Join(err, removeIfThere(path))
	}
	return st, nil
}

// lastResort takes up the store that was put aside here. The stream does not
// reach back to its beginning, and there is no copy of use: this one is of an
// earlier position of the same stream, too.
func (d *daemon) lastResort(number int, first uint64, reaches func(uint64) bool) (*store.Store, error) {
	path := storePath(d.setup, number)
	if position, _, err := standOf(path + staleEnding); err == nil && reaches(position) {
		d.log.Error().Int("partition", number).Uint64("position", position).Msg("no copy on the bus is of use: going on from the store that was put aside here")
		if err := os.Rename(path+staleEnding, path); err != nil {
			return nil, err
		}
		return store.Open(path, identityOf(d.setup, number), store.Options{})
	}
	return nil, fmt.Errorf("there is no copy on the bus to go on from, and the stream begins at position %d: what lies before it was trimmed or has expired. "+
		"If another process still has a store of the partition (a file that ends in %s), start that one", first, staleEnding)
}

// isLast reports whether a store is that of the last owner. Epochs that the
// claims have forgotten are in the stream of alerts.
func isLast(stored uint64, c *claim.Holding, published uint64) bool {
	return stored >= max(c.Stored, published)
}
