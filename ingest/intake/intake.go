// Package intake reads a partition's messages from the bus, decoded, and makes
// sure that they come from the stream that the store was filled from.
//
// An Intake is the source of a partition's loop. It reads in order from the
// stored position on, without acknowledgements: the position lives in the
// store.
package intake

import (
	"context"
	"crypto/sha256"
	"errors"
	"fmt"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/partition"
	"tailbell/monitor/store"
)

// maxBytes is about how much data one batch holds.
const maxBytes = 16 << 20

// Intake reads one partition.
type Intake struct {
	source  *bus.Source
	decoder *wire.Decoder
	raw     []bus.Raw
	missing uint64
	gap     func(bus.Missing)
}

// Open begins to read a partition after the position. gap is called when
// messages were removed from the stream before they could be read.
func Open(ctx context.Context, b *bus.Bus, setup *config.Setup, number int, after uint64, gap func(bus.Missing)) (*Intake, error) {
	source, err := b.Source(ctx, number, after)
	if err != nil {
		return nil, err
	}
	decoder := wire.NewDecoder(wire.Limits{
		MessageBytes: setup.Limits.MaxMessageBytes, Observations: setup.Limits.MaxObservations,
	})
	return &Intake{source: source, decoder: decoder, gap: gap}, nil
}

// Next waits for at least one message and returns what is there.
func (in *Intake) Next(ctx context.Context, limit int) (partition.Batch, error) {
	var err error
	clear(in.raw)
	if in.raw, err = in.source.Next(ctx, in.raw[:0], limit, maxBytes); err != nil {
		return partition.Batch{}, err
	}
	if m := in.source.Missing(); m.Messages > in.missing {
		in.missing = m.Messages
		in.gap(m)
	}
	b := partition.Batch{Messages: make([]monitor.Message, len(in.raw))}
	for i := range in.raw {
		b.Messages[i] = in.decoder.Decode(wire.Raw(in.raw[i]))
	}
	last := &in.raw[len(in.raw)-1]
	b.Mark = markOf(last)
	return b, nil
}

// Close ends the reading.
func (in *Intake) Close() error { return in.source.Close() }

func markOf(r *bus.Raw) store.Mark {
	return store.Mark{Position: r.Position, Digest: sha256.Sum256(r.Data), Stored: monitor.InstantOf(r.Stored)}
}

// ErrOtherStream is returned when the bus's stream is not the one that the
// store was filled from.
var ErrOtherStream = errors.New("the stream on the bus is not the one that the store was filled from")

// Verify compares the stream on the bus with what the store knows of it: its
// name and creation, that it reaches the stored position, and the digests of
// messages at several positions. A store that knows no stream yet learns it.
func Verify(ctx context.Context, b *bus.Bus, st *store.Store) error {
	id, err := b.Identity(ctx)
	if err != nil {
		return err
	}
	have := store.StreamIdentity{Name: id.Stream, Created: id.Created}
	known, ok, err := st.Stream()
	if err != nil {
		return err
	}
	if !ok {
		return st.SetStream(have)
	}
	if !known.Equal(have) {
		return fmt.Errorf("%w: it was stream %s made %s, now it is %s made %s", ErrOtherStream,
			known.Name, known.Created, have.Name, have.Created)
	}
	position, err := st.Position()
	if err != nil {
		return err
	}
	if position > id.Last {
		return fmt.Errorf("%w: the store stands at position %d, but the stream ends at %d: its tail is lost",
			ErrOtherStream, position, id.Last)
	}
	return verifyMarks(ctx, b, st, id.First)
}

func verifyMarks(ctx context.Context, b *bus.Bus, st *store.Store, first uint64) error {
	marks, err := st.Marks()
	if err != nil {
		return err
	}
	for _, m := range marks {
		if m.Position < first {
			continue // trimmed
		}
		raw, err := b.At(ctx, m.Position)
		if errors.Is(err, bus.ErrNoMessage) {
			continue // deleted one by one
		}
		if err != nil {
			return err
		}
		if have := markOf(&raw); have.Digest != m.Digest {
			return fmt.Errorf("%w: the message at position %d has changed", ErrOtherStream, m.Position)
		}
	}
	return nil
}
