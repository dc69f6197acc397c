package bus

import (
	"context"
	"errors"
	"fmt"
	"maps"
	"strconv"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"
)

// cloudEvent is the content type of a CloudEvent in structured mode.
const cloudEvent = "application/cloudevents+json"

// PublishAlert stores one step of an alert, a CloudEvent in structured mode,
// in the stream of alerts. The key names the step: a repeat within 24 hours is
// dropped by the bus, and repeated is true. header may be nil.
//
// Like Publish it tries again until ctx ends or the bus refuses.
func (b *Bus) PublishAlert(
	ctx context.Context, partition int, direction, indicator, key string,
	event []byte, header map[string][]string,
) (repeated bool, err error) {
	h := nats.Header(maps.Clone(header))
	if h == nil {
		h = nats.Header{}
	}
	h.Set("Content-Type", cloudEvent)
	h.Set(jetstream.MsgIDHeader, key)
	msg := &nats.Msg{Subject: b.names.alert(partition, direction, indicator), Header: h, Data: event}
	ack, err := b.publish(ctx, msg)
	if err != nil {
		return false, fmt.Errorf("publishing an alert on %s: %w", msg.Subject, err)
	}
	return ack.Duplicate, nil
}

// Headers of what the owner of a partition publishes into the stream of alerts.
const (
	// EpochHeader is the owner's epoch.
	EpochHeader = "Tailbell-Owner-Epoch"
	// RowHeader is the number of the step in the partition's outbox: all up to
	// it are in the stream. On a mark it is that of the last step before it.
	RowHeader = "Tailbell-Row"
	// RowKeyHeader is the key of that step.
	RowKeyHeader = "Tailbell-Row-Key"
	// OriginHeader says when the input stream was made from which the steps
	// follow: rows are counted by it.
	OriginHeader = "Tailbell-Origin"
)

// Published is the last message of a partition in the stream of alerts.
type Published struct {
	Position uint64 // 0: there is none
	Epoch    uint64 // 0 where it names none
	Row      uint64
	Key      string // of the step with that number
	Origin   string
}

// LastPublished asks for the partition's last message in the stream of alerts.
func (b *Bus) LastPublished(ctx context.Context, partition int) (last Published, err error) {
	err = b.patiently(ctx, func(ctx context.Context) error {
		last, err = b.lastPublished(ctx, partition)
		return err
	})
	return last, err
}

func (b *Bus) lastPublished(ctx context.Context, partition int) (Published, error) {
	s, err := b.js.Stream(ctx, b.names.alertStream())
	if err != nil {
		return Published{}, fmt.Errorf("asking for the stream %s: %w", b.names.alertStream(), mapped(err))
	}
	msg, err := s.GetLastMsgForSubject(ctx, b.names.alertOf(partition))
	if errors.Is(err, jetstream.ErrMsgNotFound) {
		return Published{}, nil
	}
	if err != nil {
		return Published{}, fmt.Errorf("reading the last message on %s: %w", b.names.alertOf(partition), mapped(err))
	}
	p := Published{Position: msg.Sequence, Origin: msg.Header.Get(OriginHeader), Key: msg.Header.Get(RowKeyHeader)}
	for name, into := range map[string]*uint64{EpochHeader: &p.Epoch, RowHeader: &p.Row} {
		if text := msg.Header.Get(name); text != "" {
			if *into, err = strconv.ParseUint(text, 10, 64); err != nil {
				return p, fmt.Errorf("message %d of %s has %s %q: no number", msg.Sequence, b.names.alertStream(), name, text)
			}
		}
	}
	return p, nil
}

// OwnerMessage is what the owner of a partition publishes into the stream of
// alerts: a step, or with Event nil a mark that says from where on it is the
// owner.
type OwnerMessage struct {
	Partition int
	Published        // Position is that of the partition's last message, which it must follow
	ID        string // of the step
	Direction string
	Indicator string
	Event     []byte // a CloudEvent in structured mode
}

// PublishOwned stores a message of a partition's owner, if it follows the
// partition's message at its Position, and returns where. The error is an
// ErrConflict if another one has been stored meanwhile. A step that the stream
// has under its key is dropped, and repeated is true.
//
// It is tried once: an error that is no ErrConflict leaves open whether the
// message was stored.
func (b *Bus) PublishOwned(ctx context.Context, m *OwnerMessage) (position uint64, repeated bool, err error) {
	h := nats.Header{}
	h.Set(EpochHeader, strconv.FormatUint(m.Epoch, 10))
	h.Set(RowHeader, strconv.FormatUint(m.Row, 10))
	h.Set(RowKeyHeader, m.Key)
	h.Set(OriginHeader, m.Origin)
	msg := &nats.Msg{Subject: b.names.owner(m.Partition), Header: h, Data: m.Event}
	if m.Event != nil {
		msg.Subject = b.names.alert(m.Partition, m.Direction, m.Indicator)
		h.Set("Content-Type", cloudEvent)
		h.Set(jetstream.MsgIDHeader, m.ID)
	}
	before := b.denied.Load()
	try, cancel := context.WithTimeout(ctx, tryTimeout)
	defer cancel()
	ack, err := b.js.PublishMsg(try, msg, jetstream.WithRetryAttempts(0),
		jetstream.WithExpectLastSequenceForSubject(m.Position, b.names.alertOf(m.Partition)))
	if err != nil {
		return 0, false, fmt.Errorf("publishing on %s: %w", msg.Subject, b.deniedSince(before, conflicting(err)))
	}
	return ack.Sequence, ack.Duplicate, nil
}

// SubscribeAlerts reads the steps in the stream of alerts in order, after the
// given position (0: from its start). Close the source when done.
func (b *Bus) SubscribeAlerts(ctx context.Context, after uint64) (*Source, error) {
	return b.newSource(ctx, b.names.alertStream(), b.names.alertSteps(), after, false)
}

// AlertsEnd returns the position of the last step in the stream of alerts now,
// 0 if it holds none.
func (b *Bus) AlertsEnd(ctx context.Context) (uint64, error) {
	s, err := b.js.Stream(ctx, b.names.alertStream())
	if err != nil {
		return 0, fmt.Errorf("asking for the stream %s: %w", b.names.alertStream(), mapped(err))
	}
	msg, err := s.GetLastMsgForSubject(ctx, b.names.alertSteps())
	if errors.Is(err, jetstream.ErrMsgNotFound) {
		return 0, nil
	}
	if err != nil {
		return 0, fmt.Errorf("reading the last step of %s: %w", b.names.alertStream(), mapped(err))
	}
	return msg.Sequence, nil
}
