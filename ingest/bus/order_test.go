package bus_test

import (
	"errors"
	"math/rand/v2"
	"testing"
	"testing/synctest"
	"time"

	"tailbell/ingest/bus"
	"tailbell/ingest/bus/bustest"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"
)

func TestSourceRecoversWhatTheClientLost(t *testing.T) {
	seed := rand.Uint64()
	t.Logf("seed %d", seed)
	rng := rand.New(rand.NewPCG(seed, 1))
	b := bustest.Open(t, bustest.Setup(t))
	const n = 3000
	publish(t, b, 0, 1, n)
	s := source(t, b, 0, 0)
	var all []bus.Raw
	lost := 0
	for len(all) < n {
		if rng.IntN(5) == 0 && lost < 50 && len(all) < n-1000 {
			if s.Lose() {
				lost++
			}
		}
		var err error
		all, err = s.Next(deadline(t), all, 1+rng.IntN(100), 1<<20)
		if err != nil {
			t.Fatal(err)
		}
	}
	expect(t, all, 1)
	expectPositions(t, all)
	if len(all) != n || lost < 3 {
		t.Errorf("%d messages, %d lost on the way", len(all), lost)
	}
	if s.Missing().Messages != 0 {
		t.Errorf("counted as missing from the stream: %+v", s.Missing())
	}
	js, err := jetstream.New(b.Conn())
	if err != nil {
		t.Fatal(err)
	}
	if n := len(consumers(t, js)); n != 1 {
		t.Errorf("%d consumers for one source", n)
	}
}

func TestSourceBoundsBytes(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		setup := bustest.Setup(t)
		setup.Bus.MaxBytes = 256 << 20
		b := bustest.Open(t, setup)
		// 100 MB, more than a client holds by itself.
		const n, size = 200, 500_000
		var batch []bus.Outgoing
		for range n {
			batch = append(batch, bus.Outgoing{Data: make([]byte, size)})
		}
		if _, err := b.PublishBatch(t.Context(), batch); err != nil {
			t.Fatal(err)
		}
		s := source(t, b, 0, 0)
		var all []bus.Raw
		for len(all) < n {
			before := len(all)
			var err error
			if all, err = s.Next(deadline(t), all, n, 3*size); err != nil {
				t.Fatal(err)
			}
			if got := len(all) - before; got > 3 {
				t.Fatalf("%d messages at once", got)
			}
			synctest.Wait() // all that comes unasked has come
			if waiting := s.Waiting() * size; waiting > 17<<20 {
				t.Fatalf("%d bytes wait in memory", waiting)
			}
		}
		expectPositions(t, all)
		publish(t, b, 0, 1, 1)
		one, err := s.Next(deadline(t), nil, 10, 0)
		if err != nil || len(one) != 1 {
			t.Errorf("a message over the limit of bytes: %d, %v", len(one), err)
		}
	})
}

// A publisher may set any header, also those by which the bus itself says that
// a request has ended.
func TestSourceIsNotFooledByHeaders(t *testing.T) {
	b := bustest.Open(t, bustest.Setup(t))
	for _, status := range []string{"100", "404", "408", "409", "503"} {
		_, err := b.Publish(t.Context(), bus.Outgoing{Header: map[string][]string{
			"Status": {status}, "Description": {"Consumer Deleted"},
		}})
		if err != nil {
			t.Fatal(err)
		}
	}
	msgs := read(t, source(t, b, 0, 0), 5, 1)
	expectPositions(t, msgs)
	if msgs[2].Header["Status"][0] != "408" {
		t.Errorf("%+v", msgs[2])
	}
}

func TestStartBeyondTheEnd(t *testing.T) {
	b := bustest.Open(t, bustest.Setup(t))
	publish(t, b, 0, 1, 10)
	_, err := b.Source(deadline(t), 0, 11)
	var beyond *bus.BeyondEndError
	if !errors.Is(err, bus.ErrBeyondEnd) || !errors.As(err, &beyond) || beyond.End != 10 || beyond.After != 11 {
		t.Errorf("%v", err)
	}
	s := source(t, b, 0, 10)
	publish(t, b, 0, 11, 1)
	expect(t, read(t, s, 1, 10), 11)
}

func TestRemovedMessagesAreCounted(t *testing.T) {
	for _, partitions := range []int{1, 2} {
		setup := bustest.Setup(t)
		setup.Partitions = partitions
		b := bustest.Open(t, setup)
		publish(t, b, 0, 1, 100)
		js, err := jetstream.New(b.Conn())
		if err != nil {
			t.Fatal(err)
		}
		stream, err := js.Stream(t.Context(), "quillmere-in")
		if err != nil {
			t.Fatal(err)
		}
		if err := stream.Purge(t.Context(), jetstream.WithPurgeSequence(31)); err != nil {
			t.Fatal(err)
		}
		for _, sequence := range []uint64{50, 51, 52} {
			if err := stream.DeleteMsg(t.Context(), sequence); err != nil {
				t.Fatal(err)
			}
		}
		s := source(t, b, 0, 10)
		msgs := read(t, s, 67, 10)
		if msgs[0].Position != 31 || msgs[66].Position != 100 {
			t.Errorf("from %d to %d", msgs[0].Position, msgs[66].Position)
		}
		want := bus.Missing{Messages: 23, From: 50, To: 52}
		if partitions > 1 { // others' positions can't be told from removed ones
			want = bus.Missing{Messages: 20, From: 11, To: 30}
		}
		if s.Missing() != want {
			t.Errorf("%d partitions: %+v, want %+v", partitions, s.Missing(), want)
		}
	}
}

func TestSourceSurvivesItsConsumer(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		b := bustest.Open(t, bustest.Setup(t))
		publish(t, b, 0, 1, 10)
		s := source(t, b, 0, 0)
		expect(t, read(t, s, 10, 100), 1)
		js, err := jetstream.New(b.Conn())
		if err != nil {
			t.Fatal(err)
		}
		for i := range 3 {
			for name := range consumers(t, js) {
				if err := js.DeleteConsumer(t.Context(), "quillmere-in", name); err != nil {
					t.Fatal(err)
				}
			}
			publish(t, b, 0, 11+i, 1)
			expect(t, read(t, s, 1, 100), 11+i)
			if n := len(consumers(t, js)); n != 1 {
				t.Errorf("%d consumers", n)
			}
		}
	})
}

func consumers(t *testing.T, js jetstream.JetStream) map[string]bool {
	t.Helper()
	stream, err := js.Stream(t.Context(), "quillmere-in")
	if err != nil {
		t.Fatal(err)
	}
	found := map[string]bool{}
	list := stream.ConsumerNames(t.Context())
	for name := range list.Name() {
		found[name] = true
	}
	if err := list.Err(); err != nil {
		t.Fatal(err)
	}
	return found
}

func TestClosedSourceLeavesNothing(t *testing.T) {
	b := bustest.Open(t, bustest.Setup(t))
	s, err := b.Source(t.Context(), 0, 0)
	if err != nil {
		t.Fatal(err)
	}
	publish(t, b, 0, 1, 10)
	read(t, s, 5, 5)
	js, err := jetstream.New(b.Conn())
	if err != nil {
		t.Fatal(err)
	}
	if n := len(consumers(t, js)); n != 1 {
		t.Errorf("%d consumers", n)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	if n := len(consumers(t, js)); n != 0 {
		t.Errorf("%d consumers", n)
	}
}

func TestDeletedStreamEndsTheSource(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		b := bustest.Open(t, bustest.Setup(t))
		publish(t, b, 0, 1, 10)
		s := source(t, b, 0, 0)
		expect(t, read(t, s, 10, 100), 1)
		b.DeleteStream(t)
		if _, err := s.Next(t.Context(), nil, 1, 1); !errors.Is(err, bus.ErrStreamReplaced) {
			t.Errorf("deleted: %v", err)
		}
		time.Sleep(time.Second) // else both were made at the same moment
		if err := b.EnsureStreams(t.Context(), true); err != nil {
			t.Fatal(err)
		}
		publish(t, b, 0, 1, 20)
		if _, err := s.Next(t.Context(), nil, 1, 1); !errors.Is(err, bus.ErrStreamReplaced) {
			t.Errorf("made anew: %v", err)
		}
	})
}

func TestClosedBusEndsTheSource(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		var states []bus.State
		b := bustest.Open(t, bustest.Setup(t), bus.WithState(func(s bus.State, _ error) { states = append(states, s) }))
		s := source(t, b, 0, 0)
		result := make(chan error)
		go func() {
			_, err := s.Next(t.Context(), nil, 1, 1)
			result <- err
		}()
		synctest.Wait()
		shut(t, b)
		if err := <-result; !errors.Is(err, bus.ErrClosed) {
			t.Errorf("%v", err)
		}
		if _, err := s.Next(t.Context(), nil, 1, 1); !errors.Is(err, bus.ErrClosed) {
			t.Errorf("again: %v", err)
		}
		if _, err := b.Publish(t.Context(), bus.Outgoing{}); !errors.Is(err, bus.ErrClosed) {
			t.Errorf("publishing: %v", err)
		}
		if len(states) != 1 || states[0] != bus.Closed || b.Conn().Status() != nats.CLOSED {
			t.Errorf("states %v", states)
		}
	})
}
