package bus

import (
	"context"
	"errors"
	"fmt"
	"maps"
	"slices"
	"strings"
	"time"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"
	"github.com/nats-io/nuid"
)

// tryTimeout is how long one attempt to publish waits for its acknowledgement.
const tryTimeout = 5 * time.Second

// Outgoing is a message for the input stream.
type Outgoing struct {
	Partition int
	Kind      Kind
	Header    map[string][]string // may be nil; it is not changed
	Data      []byte
}

// Publish stores one message in the input stream and returns its position.
// When no acknowledgement arrives it tries again until ctx ends, so give ctx a
// deadline where nobody can wait for a bus that is away.
//
// It is at least once: a message whose acknowledgement was lost may be stored
// twice. A repeated observation with an id is counted once, a repeated tick
// says nothing new, and acts and settings carry a message id by which the bus
// drops a repeat within two minutes.
//
// The error is an ErrFull or ErrTooLarge if the bus refused the message.
func (b *Bus) Publish(ctx context.Context, out Outgoing) (uint64, error) {
	msg, err := b.message(out)
	if err != nil {
		return 0, err
	}
	if out.Kind == Act || out.Kind == Setting {
		msg.Header.Set(jetstream.MsgIDHeader, nuid.Next())
	}
	ack, err := b.publish(ctx, msg)
	if err != nil {
		return 0, fmt.Errorf("publishing on %s: %w", msg.Subject, err)
	}
	return ack.Sequence, nil
}

// message turns out into a message of the bus, with a header of its own.
func (b *Bus) message(out Outgoing) (*nats.Msg, error) {
	if out.Partition < 0 || out.Partition >= partitions(b.setup) {
		return nil, fmt.Errorf("%w: %d of %d", ErrNoPartition, out.Partition, partitions(b.setup))
	}
	if limit := maxData(b.setup); out.Kind == Observation && len(out.Data) > limit {
		return nil, fmt.Errorf("%w: %d bytes of observations, the limit is %d: "+
			"split it into several messages", ErrTooLarge, len(out.Data), limit)
	}
	header := nats.Header(maps.Clone(out.Header))
	if header == nil {
		header = nats.Header{}
	}
	return &nats.Msg{Subject: b.names.in(out.Partition, out.Kind), Header: header, Data: out.Data}, nil
}

// publish sends msg until it is acknowledged, refused, or ctx ends.
func (b *Bus) publish(ctx context.Context, msg *nats.Msg) (*jetstream.PubAck, error) {
	wait := newBackoff()
	for {
		before := b.denied.Load()
		try, cancel := context.WithTimeout(ctx, tryTimeout)
		ack, err := b.js.PublishMsg(try, msg, jetstream.WithRetryAttempts(0))
		cancel()
		if err == nil {
			return ack, nil
		}
		err = b.deniedSince(before, err)
		if err := b.again(ctx, wait, err); err != nil {
			return nil, err
		}
	}
}

// again waits before the next attempt after err, or returns the error with
// which to give up.
func (b *Bus) again(ctx context.Context, wait *backoff, err error) error {
	if ctx.Err() != nil {
		return fmt.Errorf("%w (last answer of the bus: %w)", ctx.Err(), err)
	}
	if !passing(err) {
		return mapped(err)
	}
	if waitErr := wait.wait(ctx); waitErr != nil {
		return fmt.Errorf("%w (last answer of the bus: %w)", waitErr, err)
	}
	return nil
}

// Codes of the bus's own errors that its client library has no name for.
const (
	codeNoResources     jetstream.ErrorCode = 10002 // of the account
	codeNoPeers         jetstream.ErrorCode = 10005
	codeUnavailable     jetstream.ErrorCode = 10008 // temporarily
	codeNoLeader        jetstream.ErrorCode = 10009
	codeInsufficient    jetstream.ErrorCode = 10023
	codeNoStorage       jetstream.ErrorCode = 10047
	codeStoreFailed     jetstream.ErrorCode = 10077
	codeBatchOff        jetstream.ErrorCode = 10174
	codeBatchIncomplete jetstream.ErrorCode = 10176
	codeBatchTooMany    jetstream.ErrorCode = 10210
)

// passing reports whether trying again can help.
func passing(err error) bool {
	if errors.Is(err, ErrNotAllowed) {
		return false
	}
	if code := codeOf(err); code != 0 {
		return slices.Contains([]jetstream.ErrorCode{
			codeUnavailable, codeNoPeers, codeNoLeader, codeBatchIncomplete, codeBatchTooMany,
		}, code)
	}
	return slices.ContainsFunc([]error{
		nats.ErrTimeout, nats.ErrNoResponders, nats.ErrDisconnected, nats.ErrConnectionReconnecting,
		nats.ErrReconnectBufExceeded, nats.ErrStaleConnection, nats.ErrNoServers,
		jetstream.ErrTooManyStalledMsgs,
		jetstream.ErrNoStreamResponse, context.DeadlineExceeded,
	}, func(one error) bool { return errors.Is(err, one) })
}

// codeOf returns the code of an error of the bus itself, 0 if err is none.
func codeOf(err error) jetstream.ErrorCode {
	var api *jetstream.APIError
	if errors.As(err, &api) {
		return api.ErrorCode
	}
	return 0
}

// mapped adds to an error of the bus the error of this package that it means.
func mapped(err error) error {
	meaning := map[jetstream.ErrorCode]error{
		jetstream.JSErrCodeStreamMessageExceedsMaximum: ErrTooLarge,
		codeNoResources:                   ErrFull,
		codeInsufficient:                  ErrFull,
		codeNoStorage:                     ErrFull,
		jetstream.JSErrCodeStreamNotFound: ErrStreamReplaced,
	}[codeOf(err)]
	switch {
	case meaning != nil:
	case codeOf(err) == codeStoreFailed && strings.Contains(err.Error(), "maximum "):
		return fmt.Errorf("%w: raise max_bytes, or let old messages go by max_age: %w", ErrFull, err)
	case errors.Is(err, nats.ErrMaxPayload):
		meaning = ErrTooLarge
	case errors.Is(err, nats.ErrConnectionClosed), errors.Is(err, nats.ErrConnectionDraining):
		meaning = ErrClosed
	default:
		return err
	}
	return fmt.Errorf("%w: %w", meaning, err)
}
