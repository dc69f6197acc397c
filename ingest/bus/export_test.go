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

// Lose throws away the next message that arrives at the source, as a client does
// whose buffer is full. It reports whether one was to come.
func (s *Source) Lose() bool {
	if s.feed == nil || s.feed.left == 0 {
		return false
	}
	if s.feed.take() == nil {
		<-s.feed.msgs
	}
	return true
}

// Waiting is how many messages wait in memory.
func (s *Source) Waiting() int {
	if s.feed == nil {
		return 0
	}
	return len(s.feed.msgs)
}
