package bus_test

import (
	"errors"
	"testing"

	"tailbell/ingest/bus"
	"tailbell/ingest/bus/bustest"
)

func TestTrim(t *testing.T) {
	b := bustest.Open(t, bustest.Setup(t))
	for range 10 {
		if _, err := b.Publish(t.Context(), bus.Outgoing{Data: []byte("{}")}); err != nil {
			t.Fatal(err)
		}
	}
	trim := func(through, first, last uint64) {
		t.Helper()
		if err := b.Trim(t.Context(), through); err != nil {
			t.Fatal(err)
		}
		if id, err := b.Identity(t.Context()); err != nil || id.First != first || id.Last != last {
			t.Errorf("trimmed through %d: %+v, %v", through, id, err)
		}
	}
	trim(4, 5, 10)
	trim(2, 5, 10) // gone already
	if _, err := b.At(t.Context(), 4); !errors.Is(err, bus.ErrNoMessage) {
		t.Errorf("the message at 4: %v", err)
	}
	if raw, err := b.At(t.Context(), 5); err != nil || raw.Position != 5 {
		t.Errorf("the message at 5: %+v, %v", raw, err)
	}
	trim(10, 11, 10)
	if at, err := b.Publish(t.Context(), bus.Outgoing{Data: []byte("{}")}); err != nil || at != 11 {
		t.Errorf("the next message is %d, %v", at, err)
	}
}
