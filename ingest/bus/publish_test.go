package bus_test

import (
	"bytes"
	"context"
	"errors"
	"fmt"
	"testing"
	"testing/synctest"
	"time"

	"tailbell/ingest/bus"
	"tailbell/ingest/bus/bustest"

	"github.com/google/go-cmp/cmp"
)

func TestPublishStoresWhatItWasGiven(t *testing.T) {
	setup := bustest.Setup(t)
	setup.Partitions = 2
	b := bustest.Open(t, setup)
	header := map[string][]string{"Tailbell-Time": {"2026-03-02T00:00:00Z"}}
	for i, out := range []bus.Outgoing{
		{Partition: 0, Kind: bus.Observation, Header: header, Data: []byte("{}")},
		{Partition: 1, Kind: bus.Act, Data: []byte(`{"act":"note"}`)},
		{Partition: 1, Kind: bus.Setting, Data: []byte("[x]")},
		{Partition: 0, Kind: bus.Tick},
	} {
		position, err := b.Publish(t.Context(), out)
		if err != nil || position != uint64(i)+1 {
			t.Fatalf("%+v: position %d, %v", out, position, err)
		}
		raw, err := b.At(t.Context(), position)
		if err != nil {
			t.Fatal(err)
		}
		subject := fmt.Sprintf("quillmere.in.%d.%s", out.Partition, []string{"obs", "act", "set", "tick"}[i])
		if raw.Subject != subject || !bytes.Equal(raw.Data, out.Data) || raw.Position != position {
			t.Errorf("%+v", raw)
		}
		// By this the bus drops a repeat of what is not harmless twice.
		once := out.Kind == bus.Act || out.Kind == bus.Setting
		if _, found := raw.Header["Nats-Msg-Id"]; found != once {
			t.Errorf("%s: message id %v, want %v", out.Kind, found, once)
		}
		if i == 0 {
			if diff := cmp.Diff(header, raw.Header); diff != "" {
				t.Error(diff)
			}
		}
	}
	if len(header) != 1 {
		t.Errorf("the caller's header was changed: %v", header)
	}
	if _, err := b.At(t.Context(), 9); !errors.Is(err, bus.ErrNoMessage) {
		t.Errorf("past the end: %v", err)
	}
	raw, found, err := b.LastSetting(t.Context(), 1)
	if err != nil || !found || raw.Position != 3 || string(raw.Data) != "[x]" {
		t.Errorf("%+v, %v, %v", raw, found, err)
	}
	if _, found, err := b.LastSetting(t.Context(), 0); err != nil || found {
		t.Errorf("%v, %v", found, err)
	}
	end, err := b.End(t.Context())
	if err != nil || end != 4 {
		t.Errorf("end %d, %v", end, err)
	}
	for partition, want := range []uint64{4, 3} {
		if end, err := b.EndOf(t.Context(), partition); err != nil || end != want {
			t.Errorf("end of %d: %d, %v", partition, end, err)
		}
	}
	for _, p := range []int{-1, 2} {
		if _, err := b.Publish(t.Context(), bus.Outgoing{Partition: p}); !errors.Is(err, bus.ErrNoPartition) {
			t.Errorf("partition %d: %v", p, err)
		}
	}
}

func TestFullStreamRefuses(t *testing.T) {
	for _, atomic := range []bool{true, false} {
		setup := bustest.Setup(t)
		setup.Bus.MaxBytes = 1 << 19
		b := bustest.Open(t, setup)
		b.SetAtomic(atomic)
		var batch []bus.Outgoing
		for range 3000 {
			batch = append(batch, bus.Outgoing{Data: make([]byte, 250)})
		}
		done, err := b.PublishBatch(t.Context(), batch)
		if !errors.Is(err, bus.ErrFull) || done < 1000 || done > 2000 || atomic && done != 1000 {
			t.Errorf("atomic %v: %d stored, %v", atomic, done, err)
		}
		end, err := b.End(t.Context())
		if err != nil || end < uint64(done) || atomic && end != uint64(done) {
			t.Errorf("atomic %v: %d said to be stored, the stream ends at %d, %v", atomic, done, end, err)
		}
		_, err = b.Publish(t.Context(), bus.Outgoing{Data: make([]byte, 450_000)})
		if !errors.Is(err, bus.ErrFull) {
			t.Errorf("atomic %v: %v", atomic, err)
		}
		// What is there can still be read.
		expectPositions(t, read(t, source(t, b, 0, 0), int(end), 100))
	}
}

// expectPositions checks that positions go up by one from 1.
func expectPositions(t *testing.T, msgs []bus.Raw) {
	t.Helper()
	for i, m := range msgs {
		if m.Position != uint64(i)+1 {
			t.Fatalf("message %d is at %d", i+1, m.Position)
		}
	}
}

func TestTooLargeIsSaidSo(t *testing.T) {
	setup := bustest.Setup(t)
	setup.Limits.MaxMessageBytes = 2000
	b := bustest.Open(t, setup)
	if _, err := b.Publish(t.Context(), bus.Outgoing{Data: make([]byte, 2000)}); err != nil {
		t.Error(err)
	}
	if _, err := b.Publish(t.Context(), bus.Outgoing{Data: make([]byte, 2001)}); !errors.Is(err, bus.ErrTooLarge) {
		t.Error(err)
	}
	if _, err := b.Publish(t.Context(), bus.Outgoing{Kind: bus.Setting, Data: make([]byte, 100_000)}); err != nil {
		t.Errorf("a long setting: %v", err)
	}
	for _, size := range []int{2 << 20, 20 << 20} { // over the stream's limit, over the server's
		_, err := b.Publish(t.Context(), bus.Outgoing{Kind: bus.Setting, Data: make([]byte, size)})
		if !errors.Is(err, bus.ErrTooLarge) {
			t.Errorf("%d bytes: %v", size, err)
		}
	}
	batch := []bus.Outgoing{{Data: []byte("1")}, {Data: make([]byte, 2001)}, {Data: []byte("3")}}
	done, err := b.PublishBatch(t.Context(), batch)
	if done != 1 || !errors.Is(err, bus.ErrTooLarge) {
		t.Errorf("%d stored, %v", done, err)
	}
}

func TestBatchesAreStoredInOrder(t *testing.T) {
	for _, atomic := range []bool{true, false} {
		setup := bustest.Setup(t)
		setup.Partitions = 3
		b := bustest.Open(t, setup)
		b.SetAtomic(atomic)
		header := map[string][]string{"Tailbell-Time": {"2026-03-02T00:00:00Z"}}
		var batch []bus.Outgoing
		for i := range 2100 {
			batch = append(batch, bus.Outgoing{Partition: i % 3, Header: header, Data: fmt.Appendf(nil, "%d", i/3)})
		}
		done, err := b.PublishBatch(t.Context(), batch)
		if err != nil || done != len(batch) {
			t.Fatalf("%d stored, %v", done, err)
		}
		if len(header) != 1 {
			t.Errorf("the caller's header was changed: %v", header)
		}
		for p := range 3 {
			s := source(t, b, p, 0)
			msgs := read(t, s, 700, 333)
			expect(t, msgs, 0)
			if s.Missing().Messages != 0 {
				t.Errorf("missing: %+v", s.Missing())
			}
		}
	}
	b := bustest.Open(t, bustest.Setup(t))
	if done, err := b.PublishBatch(t.Context(), nil); done != 0 || err != nil {
		t.Errorf("an empty batch: %d, %v", done, err)
	}
}

func TestBatchFallsBackWhereTheBusTakesNone(t *testing.T) {
	b := bustest.Open(t, bustest.Setup(t))
	b.SwitchBatchesOff(t)
	publish(t, b, 0, 1, 1100)
	msgs := read(t, source(t, b, 0, 0), 1100, 1000)
	expect(t, msgs, 1)
	for key := range msgs[0].Header {
		t.Errorf("a mark of a batch was left: %s", key)
	}
}

func TestPublishGivesUpWithItsContext(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		b := bustest.Open(t, bustest.Setup(t))
		b.DeleteStream(t)
		ctx, cancel := context.WithTimeout(t.Context(), time.Minute)
		defer cancel()
		began := time.Now()
		_, err := b.Publish(ctx, bus.Outgoing{Data: []byte("1")})
		if !errors.Is(err, context.DeadlineExceeded) || time.Since(began) != time.Minute {
			t.Errorf("after %s: %v", time.Since(began), err)
		}
		done, err := b.PublishBatch(ctx, []bus.Outgoing{{}, {}})
		if done != 0 || !errors.Is(err, context.DeadlineExceeded) {
			t.Errorf("%d, %v", done, err)
		}
	})
}

func TestPublishWaitsForTheBus(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		b := bustest.Open(t, bustest.Setup(t))
		b.DeleteStream(t)
		go func() {
			time.Sleep(time.Hour)
			if err := b.EnsureStreams(t.Context(), true); err != nil {
				t.Error(err)
			}
		}()
		if _, err := b.Publish(t.Context(), bus.Outgoing{Data: []byte("1")}); err != nil {
			t.Error(err)
		}
	})
}

func TestAlertStepsAreStoredOnce(t *testing.T) {
	b := bustest.Open(t, bustest.Setup(t))
	event := []byte(`{"specversion":"1.0"}`)
	for i, want := range []bool{false, true} {
		repeated, err := b.PublishAlert(t.Context(), 0, "upper", "line infections.v2", "a1/1", event,
			map[string][]string{"Extra": {"1"}})
		if err != nil || repeated != want {
			t.Errorf("time %d: repeated %v, %v", i+1, repeated, err)
		}
	}
	if _, err := b.PublishAlert(t.Context(), 0, "lower", "falls", "a1/2", event, nil); err != nil {
		t.Fatal(err)
	}
	s, err := b.SubscribeAlerts(t.Context(), 0)
	if err != nil {
		t.Fatal(err)
	}
	defer s.Close() //nolint:errcheck // the bus is closed anyway
	msgs := read(t, s, 2, 10)
	if len(msgs) != 2 || msgs[0].Subject != "quillmere.alert.0.upper.line_infections_v2" ||
		msgs[1].Subject != "quillmere.alert.0.lower.falls" || !bytes.Equal(msgs[0].Data, event) {
		t.Errorf("%+v", msgs)
	}
	want := map[string][]string{
		"Content-Type": {"application/cloudevents+json"}, "Nats-Msg-Id": {"a1/1"}, "Extra": {"1"},
	}
	if diff := cmp.Diff(want, msgs[0].Header); diff != "" {
		t.Error(diff)
	}
}

// TestPublishInOrder stores what one partition tells another, with atomic batches and
// without.
func TestPublishInOrder(t *testing.T) {
	for _, atomic := range []bool{true, false} {
		b := open(t, bustest.Setup(t))
		b.SetAtomic(atomic)
		var msgs []bus.Outgoing
		for i := range 30 {
			msgs = append(msgs, bus.Outgoing{Kind: bus.Summary, Data: fmt.Appendf(nil, "told %d", i)})
		}
		if n, err := b.PublishInOrder(deadline(t), msgs); err != nil || n != len(msgs) {
			t.Fatalf("atomic batches %t: %d stored, %v", atomic, n, err)
		}
		for i, text := range readSummaries(t, b, 0, 0) {
			if want := fmt.Sprintf("%d told %d", i+1, i); text != want {
				t.Errorf("atomic batches %t: %q, want %q", atomic, text, want)
			}
		}
		if n, err := b.PublishInOrder(deadline(t), []bus.Outgoing{{Partition: 7}}); n != 0 || !errors.Is(err, bus.ErrNoPartition) {
			t.Errorf("%d stored in no partition, %v", n, err)
		}
		shut(t, b)
	}
}
