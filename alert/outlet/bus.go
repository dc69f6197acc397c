package outlet

import (
	"context"

	"tailbell/monitor/life"
)

// Publish stores one event in the stream of alerts under its key; a repeat of
// the key is dropped by the bus.
type Publish func(ctx context.Context, direction, indicator, key string, event []byte) error

// Bus delivers to the stream of alerts on the bus.
type Bus struct {
	deployment string
	publish    Publish
}

// NewBus returns the outlet that publishes CloudEvents.
func NewBus(deployment string, publish Publish) *Bus { return &Bus{deployment, publish} }

// Name is "bus".
func (*Bus) Name() string { return "bus" }

// Deliver publishes the step.
func (b *Bus) Deliver(ctx context.Context, n *life.Notice) error {
	event, err := CloudEvent(b.deployment, n)
	if err != nil {
		return err
	}
	return b.publish(ctx, string(n.Record.Direction), n.Record.Indicator, n.Key, event)
}
