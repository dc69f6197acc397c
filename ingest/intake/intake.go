// Package intake reads a partition's messages from the bus, decoded, and makes
// sure that they come from the stream that the store was filled from.
//
// An Intake is the source of a partition's loop. It reads in order from the
// stored position on, without acknowledgements: the position lives in the
// store.
//
// It also guards the partition's clock, which is the bus's and never goes back:
// a message that was stored more than an hour after the one before it, and more
// than an hour ahead of the local clock, is held with all that follows. Looks
// can't be unmade, so a person decides, or the local clock gets there. What is
// held is decided before a message reaches the engine, so that the engine stays
// a function of the stream alone.
package intake

import (
	"context"
	"time"

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
	source  source
	decoder *wire.Decoder
	limits  wire.Limits
	ready   []bus.Raw // read, not yet handed out
	missing uint64
	opts    Options
	guard   *guard // nil in history time
}

// source is the bus's.
type source interface {
	Next(ctx context.Context, dst []bus.Raw, limit, maxBytes int) ([]bus.Raw, error)
	Missing() bus.Missing
	Close() error
}

// Options say where an Intake begins and whom it tells.
type Options struct {
	// After is the position after which to read, Stored when the message there
	// was stored (monitor.Beginning if that is not known).
	After  uint64
	Stored monitor.Instant
	// Gap is called when messages were removed from the stream before they
	// could be read. Held is called when the intake is held, and with nil when
	// it goes on. Both may be nil and must not block.
	Gap  func(bus.Missing)
	Held func(*Hold)
	// Summaries begins to read what other partitions told, and nothing else, after
	// a position. Open reads the partition's.
	Summaries func(ctx context.Context, after uint64) (*bus.Source, error)
	// Now tells the local time by which the bus's clock is judged.
	Now func() time.Time
}

// Open begins to read a partition.
func Open(ctx context.Context, b *bus.Bus, setup *config.Setup, number int, o Options) (*Intake, error) {
	s, err := b.Source(ctx, number, o.After)
	if err != nil {
		return nil, err
	}
	if o.Summaries == nil {
		o.Summaries = func(ctx context.Context, after uint64) (*bus.Source, error) { return b.Summaries(ctx, number, after) }
	}
	return newIntake(s, setup, o), nil
}

// Over reads what a source gives, instead of a partition of the bus. It closes
// the source.
func Over(s *bus.Source, setup *config.Setup, o Options) *Intake { return newIntake(s, setup, o) }

func newIntake(s source, setup *config.Setup, o Options) *Intake {
	if o.Gap == nil {
		o.Gap = func(bus.Missing) {}
	}
	if o.Held == nil {
		o.Held = func(*Hold) {}
	}
	limits := wire.Limits{MessageBytes: setup.Limits.MaxMessageBytes, Observations: setup.Limits.MaxObservations}
	in := &Intake{source: s, opts: o, decoder: wire.NewDecoder(limits), limits: limits}
	if !setup.History {
		in.guard = newGuard(o.Stored, o.Now, o.Held)
	}
	return in
}

// Next waits for at least one message and returns what is there.
func (in *Intake) Next(ctx context.Context, limit int) (partition.Batch, error) {
	if len(in.ready) == 0 {
		if err := in.read(ctx, limit); err != nil {
			return partition.Batch{}, err
		}
	}
	n := min(limit, len(in.ready))
	if in.guard != nil {
		var err error
		if n, err = in.guard.pass(ctx, in.ready[:n]); err != nil {
			return partition.Batch{}, err
		}
	}
	raw := in.ready[:n]
	in.ready = in.ready[n:]
	b := partition.Batch{
		Messages: make([]monitor.Message, n),
		Mark:     func(i int) store.Mark { return markOf(&raw[i]) },
	}
	for i := range raw {
		b.Messages[i] = in.decoder.Decode(wire.Raw(raw[i]))
	}
	return b, nil
}

func (in *Intake) read(ctx context.Context, limit int) error {
	var err error
	// What the last batch holds may still be asked for its marks.
	in.ready, err = in.source.Next(ctx, nil, limit, maxBytes)
	if err != nil {
		return err
	}
	if m := in.source.Missing(); m.Messages > in.missing {
		in.missing = m.Messages
		in.opts.Gap(m)
	}
	return nil
}

// Held returns what the intake is held at, nil if it is not.
func (in *Intake) Held() *Hold {
	if in.guard == nil {
		return nil
	}
	return in.guard.held()
}

// Accept lets the intake go on past the message at a position at which it is
// held, because a person said so. It reports whether it was held there.
func (in *Intake) Accept(position uint64) bool { return in.guard != nil && in.guard.accept(position) }

// Close ends the reading.
func (in *Intake) Close() error { return in.source.Close() }
