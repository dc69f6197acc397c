package bus

import (
	"context"
	"fmt"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"
	"github.com/synadia-io/orbit.go/jetstreamext"
)

const (
	// batchMessages is the most that one atomic batch of the bus may hold.
	batchMessages = 1000
	// batchBytes keeps a batch well under what a connection may have pending.
	batchBytes = 8 * mib
)

// atOnce sends a batch without waiting for the first message's acknowledgement:
// the last one's answers for all.
var atOnce = jetstreamext.BatchFlowControl{AckFirst: false}

// PublishBatch stores many messages in order, several thousand a second even
// where every write goes to the disk. It returns how many from the start of
// msgs are stored for certain; if that is fewer than all the error says why,
// and what follows may have been stored in part.
//
// Like Publish it is at least once, and tries again until ctx ends. It is
// meant for observations: acts and settings get no message id here.
func (b *Bus) PublishBatch(ctx context.Context, msgs []Outgoing) (int, error) {
	return b.publishChunks(ctx, msgs, b.publishWindow)
}

// PublishInOrder stores many messages so that none comes before the ones above it in
// msgs: what one partition tells another must not overtake itself. It is as
// PublishBatch otherwise, but slow where the stream takes no atomic batches.
func (b *Bus) PublishInOrder(ctx context.Context, msgs []Outgoing) (int, error) {
	return b.publishChunks(ctx, msgs, b.publishSingly)
}

// publishChunks stores messages, each chunk of them as one atomic batch, or where
// that can't be in the way that is given.
func (b *Bus) publishChunks(ctx context.Context, msgs []Outgoing, otherwise publishing) (int, error) {
	done := 0
	for done < len(msgs) {
		chunk, err := b.chunk(msgs[done:])
		if err != nil && len(chunk) == 0 {
			return done, fmt.Errorf("message %d of the batch: %w", done+1, err)
		}
		stored, err := b.publishChunk(ctx, chunk, otherwise)
		done += stored
		if err != nil {
			return done, fmt.Errorf("publishing a batch: %w", err)
		}
	}
	return done, nil
}

// publishing stores messages and returns how many from the start it did.
type publishing func(ctx context.Context, chunk []*nats.Msg) (int, error)

// chunk takes as many messages as fit into one batch of the bus. If the first
// is at fault it returns none and the error.
func (b *Bus) chunk(msgs []Outgoing) ([]*nats.Msg, error) {
	var chunk []*nats.Msg
	size := 0
	for _, out := range msgs {
		msg, err := b.message(out)
		if err != nil {
			return chunk, err
		}
		size += msg.Size()
		if len(chunk) == batchMessages || len(chunk) > 0 && size > batchBytes {
			break
		}
		chunk = append(chunk, msg)
	}
	return chunk, nil
}

// publishChunk stores a chunk, as one atomic batch if the stream takes those.
func (b *Bus) publishChunk(ctx context.Context, chunk []*nats.Msg, otherwise publishing) (int, error) {
	if len(chunk) == 1 {
		if _, err := b.publish(ctx, chunk[0]); err != nil {
			return 0, err
		}
		return 1, nil
	}
	if !b.atomic {
		return otherwise(ctx, chunk)
	}
	wait := newBackoff()
	for {
		before := b.denied.Load()
		try, cancel := context.WithTimeout(ctx, tryTimeout)
		_, err := jetstreamext.PublishMsgBatch(try, b.js, chunk, atOnce)
		cancel()
		if err == nil {
			return len(chunk), nil
		}
		if codeOf(err) == codeBatchOff {
			return otherwise(ctx, plain(chunk))
		}
		if err := b.again(ctx, wait, b.deniedSince(before, err)); err != nil {
			return 0, err
		}
	}
}

// plain takes the marks of an atomic batch off the messages.
func plain(chunk []*nats.Msg) []*nats.Msg {
	for _, msg := range chunk {
		msg.Reply = ""
		msg.Header.Del(jetstreamext.BatchIDHeader)
		msg.Header.Del(jetstreamext.BatchSeqHeader)
		msg.Header.Del(jetstreamext.BatchCommitHeader)
	}
	return chunk
}

// publishSingly stores one message after the other.
func (b *Bus) publishSingly(ctx context.Context, chunk []*nats.Msg) (int, error) {
	for i, msg := range chunk {
		if _, err := b.publish(ctx, msg); err != nil {
			return i, err
		}
	}
	return len(chunk), nil
}

// publishWindow sends all messages of a chunk and then waits for their
// acknowledgements. From the first that is missing on, all are sent again, so
// that what is stored for certain is always a prefix.
func (b *Bus) publishWindow(ctx context.Context, chunk []*nats.Msg) (int, error) {
	wait := newBackoff()
	done := 0
	for {
		before := b.denied.Load()
		stored, err := b.tryWindow(ctx, chunk[done:])
		done += stored
		if err == nil {
			return done, nil
		}
		if stored > 0 {
			wait.tries = 0
		}
		if err := b.again(ctx, wait, b.deniedSince(before, err)); err != nil {
			return done, err
		}
	}
}

// tryWindow sends messages without waiting in between and returns how many
// from the start were acknowledged.
func (b *Bus) tryWindow(ctx context.Context, msgs []*nats.Msg) (int, error) {
	try, cancel := context.WithTimeout(ctx, tryTimeout)
	defer cancel()
	acks := make([]jetstream.PubAckFuture, 0, len(msgs))
	var sendErr error
	for _, msg := range msgs {
		ack, err := b.js.PublishMsgAsync(msg, jetstream.WithRetryAttempts(0))
		if err != nil {
			sendErr = err
			break
		}
		acks = append(acks, ack)
	}
	for i, ack := range acks {
		select {
		case <-ack.Ok():
		case err := <-ack.Err():
			return i, err
		case <-try.Done():
			return i, try.Err()
		}
	}
	return len(acks), sendErr
}
