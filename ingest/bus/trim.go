package bus

import (
	"context"
	"fmt"

	"github.com/nats-io/nats.go/jetstream"
)

// Trim removes the messages of the input stream up to a position. Positions
// after it keep their numbers. Only the daemon's own connection may do it on an
// embedded bus.
func (b *Bus) Trim(ctx context.Context, through uint64) error {
	return b.patiently(ctx, func(ctx context.Context) error {
		s, err := b.js.Stream(ctx, b.names.inStream())
		if err != nil {
			return fmt.Errorf("asking for the stream %s: %w", b.names.inStream(), mapped(err))
		}
		// Everything below a sequence goes.
		if err := s.Purge(ctx, jetstream.WithPurgeSequence(through+1)); err != nil {
			return fmt.Errorf("trimming the stream %s: %w", b.names.inStream(), mapped(err))
		}
		return nil
	})
}
