package bus_test

import (
	"context"
	"errors"
	"fmt"
	"testing"
	"testing/synctest"
	"time"

	"tailbell/ingest/bus"
	"tailbell/ingest/bus/bustest"
)

// publish stores n observations in the partition, "<from>", "<from+1>", ...
func publish(t *testing.T, b *bus.Bus, partition, from, n int) {
	t.Helper()
	var batch []bus.Outgoing
	for i := range n {
		batch = append(batch, bus.Outgoing{Partition: partition, Data: fmt.Appendf(nil, "%d", from+i)})
	}
	done, err := b.PublishBatch(t.Context(), batch)
	if err != nil || done != n {
		t.Fatalf("published %d of %d: %v", done, n, err)
	}
}

// read reads until it has n messages.
func read(t *testing.T, s *bus.Source, n, limit int) []bus.Raw {
	t.Helper()
	var all []bus.Raw
	ctx := deadline(t)
	for len(all) < n {
		var err error
		before := len(all)
		all, err = s.Next(ctx, all, limit, 1<<20)
		if err != nil {
			t.Fatalf("after %d messages: %v", len(all), err)
		}
		if got := len(all) - before; got < 1 || got > limit {
			t.Fatalf("Next returned %d messages, limit %d", got, limit)
		}
	}
	return all
}

// expect checks that the messages are "<from>", "<from+1>", ... in order.
func expect(t *testing.T, msgs []bus.Raw, from int) {
	t.Helper()
	for i, m := range msgs {
		if want := fmt.Sprint(from + i); string(m.Data) != want {
			t.Fatalf("message %d at position %d is %q, want %q", i, m.Position, m.Data, want)
		}
		if i > 0 && m.Position <= msgs[i-1].Position {
			t.Fatalf("position %d after %d", m.Position, msgs[i-1].Position)
		}
	}
}

func source(t *testing.T, b *bus.Bus, partition int, after uint64) *bus.Source {
	t.Helper()
	s, err := b.Source(t.Context(), partition, after)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if err := s.Close(); err != nil && !errors.Is(err, bus.ErrClosed) {
			t.Error(err)
		}
	})
	return s
}

func TestSourceReadsInOrderFromAPosition(t *testing.T) {
	b := bustest.Open(t, bustest.Setup(t))
	const n = 11_000
	publish(t, b, 0, 1, n)
	s := source(t, b, 0, 0)
	all := read(t, s, n, 700)
	expect(t, all, 1)
	if len(all) != n || s.Position() != n {
		t.Fatalf("%d messages up to %d", len(all), s.Position())
	}
	for _, after := range []int{1, 9_999, 10_000, n - 1} {
		s := source(t, b, 0, uint64(after))
		rest := read(t, s, n-after, 100_000)
		expect(t, rest, after+1)
		if rest[0].Position != uint64(after)+1 {
			t.Errorf("after %d came %d", after, rest[0].Position)
		}
	}
}

func TestSourceReturnsAtOnceWhatIsThere(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		b := bustest.Open(t, bustest.Setup(t))
		s := source(t, b, 0, 0)
		began := time.Now()
		published := make(chan error)
		go func() {
			time.Sleep(3 * time.Hour)
			_, err := b.Publish(t.Context(), bus.Outgoing{Data: []byte("1")})
			published <- err
		}()
		msgs, err := s.Next(t.Context(), nil, 100, 1<<20)
		if err != nil || len(msgs) != 1 {
			t.Fatalf("%d messages, %v", len(msgs), err)
		}
		if err := <-published; err != nil {
			t.Error(err)
		}
		if waited := time.Since(began); waited != 3*time.Hour {
			t.Errorf("the message came after %s", waited)
		}
		if stored := msgs[0].Stored; stored.Location() != time.UTC || time.Since(stored) > time.Second {
			t.Errorf("stored at %s", stored)
		}
	})
}

func TestNextEndsWithItsContext(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		b := bustest.Open(t, bustest.Setup(t))
		s := source(t, b, 0, 0)
		ctx, cancel := context.WithTimeout(t.Context(), time.Minute)
		defer cancel()
		msgs, err := s.Next(ctx, nil, 10, 1<<20)
		if !errors.Is(err, context.DeadlineExceeded) || len(msgs) != 0 {
			t.Fatalf("%d messages, %v", len(msgs), err)
		}
		publish(t, b, 0, 1, 3)
		expect(t, read(t, s, 3, 10), 1)
	})
}
