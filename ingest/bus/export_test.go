package bus

import (
	"context"
	"testing"
)

// EnsureStreams sees to the streams again.
func (b *Bus) EnsureStreams(ctx context.Context, own bool) error { return b.ensureStreams(ctx, own) }

// SetAtomic says whether the bus is thought to take atomic batches.
func (b *Bus) SetAtomic(atomic bool) { b.atomic = atomic }

// SwitchBatchesOff makes the stream refuse atomic batches behind the bus's back.
func (b *Bus) SwitchBatchesOff(t *testing.T) {
	t.Helper()
	c := b.inConfig()
	c.AllowAtomicPublish = false
	if _, err := b.js.UpdateStream(t.Context(), c); err != nil {
		t.Fatal(err)
	}
}

// DeleteStream deletes the input stream.
func (b *Bus) DeleteStream(t *testing.T) {
	t.Helper()
	if err := b.js.DeleteStream(t.Context(), b.names.inStream()); err != nil {
		t.Fatal(err)
	}
}

// Lose throws away the next message that has arrived at the source, as a client
// does whose buffer is full.
func (s *Source) Lose() {
	if s.feed.held != nil {
		s.feed.held = nil
		return
	}
	<-s.feed.msgs
}

// Request asks for messages without taking any.
func (s *Source) Request() error { return s.ask() }
