package bus

import (
	"context"
	"fmt"
	"maps"

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

// SubscribeAlerts reads the stream of alerts in order, after the given
// position (0: from its start). Close the source when done.
func (b *Bus) SubscribeAlerts(ctx context.Context, after uint64) (*Source, error) {
	return b.newSource(ctx, b.names.alertStream(), b.names.alertAll(), after, true)
}

// AlertsEnd returns the position of the last message of the stream of alerts
// now, 0 if it has had none.
func (b *Bus) AlertsEnd(ctx context.Context) (uint64, error) {
	id, err := b.identity(ctx, b.names.alertStream())
	return id.Last, err
}
