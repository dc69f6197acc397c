package intake

import (
	"context"
	"crypto/sha256"
	"errors"
	"fmt"
	"time"

	"tailbell/ingest/bus"
	"tailbell/monitor"
	"tailbell/monitor/store"
)

// ErrOtherStream is returned when the bus's stream is not the one that the
// store was filled from. The error is a *DifferenceError.
var ErrOtherStream = errors.New("the stream on the bus is not the one that the store was filled from")

// Kind says in what way a stream differs.
type Kind int

// The kinds of difference.
const (
	// Recreated: it was made at another time, or is another stream.
	Recreated Kind = iota
	// Short: it ends before the stored position.
	Short
	// Changed: at a known position stands another message.
	Changed
)

// String returns the kind in words.
func (k Kind) String() string {
	switch k {
	case Recreated:
		return "recreated"
	case Short:
		return "ends before the stored position"
	case Changed:
		return "changed"
	}
	return "unknown difference"
}

// DifferenceError says how the stream on the bus differs from what a store was
// filled from, and how far. It is an ErrOtherStream.
type DifferenceError struct {
	Kind     Kind
	Was, Now store.StreamIdentity
	// Position is where the store stands, Stored when the message there was
	// stored (monitor.Beginning if that is not known).
	Position uint64
	Stored   monitor.Instant
	// First and Last bound what the stream holds now.
	First, Last uint64
	// Agreed is the last position at which the two are known to agree, 0 for
	// none. What was counted from the positions after it, up to Position, may
	// be gone from the stream.
	Agreed uint64
	// At is the position of the message that has changed, for Changed.
	At uint64
}

// Is reports whether target is ErrOtherStream.
func (d *DifferenceError) Is(target error) bool { return target == ErrOtherStream }

func (d *DifferenceError) Error() string {
	const out = "Publishers must send again what they sent after that and the store has not counted; " +
		"a copy of the store that fits the stream, or tailbell store accept, is the way on"
	last := "at a time not known"
	if d.Stored != monitor.Beginning {
		last = d.Stored.Time().Format(time.RFC3339Nano)
	}
	switch d.Kind {
	case Recreated:
		return fmt.Sprintf("%v: it was stream %s made %s, now it is %s made %s. The store has counted up to position %d, stored %s. %s",
			ErrOtherStream, d.Was.Name, d.Was.Created.Format(time.RFC3339Nano), d.Now.Name, d.Now.Created.Format(time.RFC3339Nano),
			d.Position, last, out)
	case Short:
		return fmt.Sprintf("%v: the stream ends at position %d, but the store has counted up to %d, stored %s: "+
			"positions %d to %d (%d messages) are lost from the stream. %s",
			ErrOtherStream, d.Last, d.Position, last, d.Last+1, d.Position, d.Position-d.Last, out)
	case Changed:
	}
	return fmt.Sprintf("%v: the message at position %d is another one. They agree up to position %d; the store has counted up to %d, stored %s: "+
		"of positions %d to %d the stream may hold others than were counted. %s",
		ErrOtherStream, d.At, d.Agreed, d.Position, last, d.Agreed+1, d.Position, out)
}

// Verify compares the stream on the bus with what the store knows of it: its
// name and creation, that it reaches the stored position, and times and
// digests of messages at several positions. A store that knows no stream yet
// learns it. The error is a *DifferenceError if the two do not belong together.
func Verify(ctx context.Context, b *bus.Bus, st *store.Store) error {
	_, known, err := st.Stream()
	if err != nil {
		return err
	}
	d, err := Compare(ctx, b, st)
	switch {
	case err != nil:
		return err
	case d == nil:
		return nil
	case !known:
		return st.SetStream(d.Now)
	}
	return d
}

// Compare returns how the stream on the bus differs from what the store was
// filled from, nil if it does not.
func Compare(ctx context.Context, b *bus.Bus, st *store.Store) (*DifferenceError, error) {
	id, err := b.Identity(ctx)
	if err != nil {
		return nil, err
	}
	d := &DifferenceError{Now: store.StreamIdentity{Name: id.Stream, Created: id.Created}, First: id.First, Last: id.Last, Stored: monitor.Beginning}
	if d.Was, _, err = st.Stream(); err != nil {
		return nil, err
	}
	if d.Position, err = st.Position(); err != nil {
		return nil, err
	}
	marks, err := st.Marks()
	if err != nil {
		return nil, err
	}
	if len(marks) > 0 {
		d.Stored = marks[0].Stored
	}
	if !d.Was.Equal(d.Now) {
		d.Kind = Recreated
		return d, nil
	}
	if err := d.compareMarks(ctx, b, marks); err != nil {
		return nil, err
	}
	switch {
	case d.At > 0:
		d.Kind = Changed
	case d.Position > d.Last:
		d.Kind = Short
	default:
		return nil, nil
	}
	return d, nil
}

// compareMarks finds the newest mark that agrees and the oldest one that does
// not, among those whose messages the stream still holds.
func (d *DifferenceError) compareMarks(ctx context.Context, b *bus.Bus, marks []store.Mark) error {
	for _, m := range marks { // newest first
		if m.Position > d.Last || m.Position < d.First {
			continue
		}
		raw, err := b.At(ctx, m.Position)
		if errors.Is(err, bus.ErrNoMessage) {
			continue // deleted one by one
		}
		if err != nil {
			return err
		}
		if have := markOf(&raw); have.Digest == m.Digest && have.Stored == m.Stored {
			d.Agreed = m.Position
			return nil
		}
		d.At = m.Position
	}
	return nil
}

func markOf(r *bus.Raw) store.Mark {
	return store.Mark{Position: r.Position, Digest: sha256.Sum256(r.Data), Stored: monitor.InstantOf(r.Stored)}
}

// Cut is the position after which reading goes on when the stream of the
// difference is accepted: that of the last message that the bus stored no later
// than the last one that the store has counted. The bus's stored times never
// fall, so that every message after it is new to the store, and every one up
// to it was counted or was never published.
func (d *DifferenceError) Cut(ctx context.Context, b *bus.Bus) (uint64, error) {
	low, high := d.First-1, d.Last // stored(low) <= d.Stored; the cut lies in [low, high]
	if d.Stored == monitor.Beginning {
		return low, nil
	}
	for low < high {
		middle := low + (high-low+1)/2
		raw, err := nextAt(ctx, b, middle, high)
		switch {
		case errors.Is(err, bus.ErrNoMessage):
			high = middle - 1
		case err != nil:
			return 0, err
		case monitor.InstantOf(raw.Stored) <= d.Stored:
			low = raw.Position
		default:
			high = middle - 1
		}
	}
	return low, nil
}

// nextAt returns the first message from a position to another.
func nextAt(ctx context.Context, b *bus.Bus, from, to uint64) (bus.Raw, error) {
	for ; from <= to; from++ {
		raw, err := b.At(ctx, from)
		if !errors.Is(err, bus.ErrNoMessage) {
			return raw, err
		}
	}
	return bus.Raw{}, fmt.Errorf("%w from %d to %d", bus.ErrNoMessage, from, to)
}
