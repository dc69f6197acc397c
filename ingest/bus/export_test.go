package bus

import "context"

// EnsureStreams sees to the streams again.
func (b *Bus) EnsureStreams(ctx context.Context, own bool) error { return b.ensureStreams(ctx, own) }

// SetAtomic says whether the bus is thought to take atomic batches.
func (b *Bus) SetAtomic(atomic bool) { b.atomic = atomic }

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
