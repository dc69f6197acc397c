package outlet

import (
	"context"

	"tailbell/monitor/life"
)

// Published is one event for the stream of alerts.
type Published struct {
	// Number is that of the step in the outbox, 0 for a test.
	Number uint64
	// Key names the step: a repeat of it is dropped by the bus.
	Key                  string
	Direction, Indicator string
	Event                []byte
}

// Publish stores one event in the stream of alerts.
type Publish func(ctx context.Context, p *Published) error

// Bus delivers to the stream of alerts on the bus.
type Bus struct {
	deployment string
	publish    Publish
}

// NewBus returns the outlet that publishes CloudEvents.
func NewBus(deployment string, publish Publish) *Bus { return &Bus{deployment, publish} }

// BusName is the name of the outlet that a Bus is.
const BusName = "bus"

// Name is "bus".
func (*Bus) Name() string { return BusName }

// Forgives is so: the bus drops repeats by their keys for a day.
func (*Bus) Forgives() {}

// Deliver publishes a step that is in no outbox: a test.
func (b *Bus) Deliver(ctx context.Context, n *life.Notice) error {
	return b.DeliverNumbered(ctx, 0, n)
}

// DeliverNumbered publishes the step with a number.
func (b *Bus) DeliverNumbered(ctx context.Context, number uint64, n *life.Notice) error {
	event, err := CloudEvent(b.deployment, n)
	if err != nil {
		return err
	}
	return b.publish(ctx, &Published{Number: number, Key: n.Key, Direction: string(n.Record.Direction), Indicator: n.Record.Indicator, Event: event})
}
