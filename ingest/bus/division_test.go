package bus_test

import (
	"context"
	"errors"
	"fmt"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/bus/bustest"
)

// with is the set-up with so many partitions.
func with(setup *config.Setup, partitions int) *config.Setup {
	next := *setup
	next.Partitions = partitions
	return &next
}

// readAll reads what a partition holds, as "position data".
func readAll(t *testing.T, b *bus.Bus, partition int) (texts []string, times []time.Time) {
	t.Helper()
	ctx := deadline(t)
	end, err := b.EndOf(ctx, partition)
	if err != nil {
		t.Fatal(err)
	}
	s, err := b.Source(ctx, partition, 0)
	if err != nil {
		t.Fatal(err)
	}
	for s.Position() < end {
		raws, err := s.Next(ctx, nil, 100, 1<<20)
		if err != nil {
			t.Fatal(err)
		}
		for _, r := range raws {
			texts, times = append(texts, fmt.Sprintf("%d %s", r.Position, r.Data)), append(times, r.Stored)
		}
	}
	if m := s.Missing(); partition == 0 && m.Messages > 0 {
		t.Errorf("missing: %+v", m)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	return texts, times
}

func TestDivision(t *testing.T) {
	for _, atomic := range []bool{true, false} {
		t.Run(fmt.Sprintf("atomic batches %t", atomic), func(t *testing.T) { testDivision(t, atomic) })
	}
}

func testDivision(t *testing.T, atomic bool) {
	t.Helper()
	setup := with(bustest.Setup(t), 2)
	b := open(t, setup)
	publish(t, b, 0, 1, 3)
	publish(t, b, 1, 4, 2)
	shut(t, b)

	// A division that breaks off.
	b = open(t, setup, bus.ToDivide())
	b.SetAtomic(atomic)
	d, err := b.Divide(t.Context(), 3)
	if err != nil {
		t.Fatal(err)
	}
	// What the old partitions still have to tell each other goes in, and nothing else.
	if _, err := b.Publish(t.Context(), bus.Outgoing{Partition: 1, Kind: bus.Summary, Data: []byte("told")}); err != nil {
		t.Fatal(err)
	}
	refusesLate(t, b, bus.Outgoing{Data: []byte("late")})
	if err := d.Begin(t.Context()); err != nil {
		t.Fatal(err)
	}
	at := time.Date(2026, 3, 2, 10, 0, 0, 123456000, time.UTC)
	carry := func(d *bus.Division, from, to int) {
		t.Helper()
		var msgs []bus.Outgoing
		var times []time.Time
		for i := from; i < to; i++ {
			msgs = append(msgs, bus.Outgoing{
				Partition: i % 3, Kind: bus.Observation, Data: fmt.Appendf(nil, "carried %d", i),
				Header: map[string][]string{"nats-expected-stream": {"other"}, "ce-id": {"7"}, "Tailbell-stored": {"yesterday"}},
			})
			times = append(times, at.Add(time.Duration(i)*time.Second))
		}
		if err := d.Carry(deadline(t), msgs, times); err != nil {
			t.Fatal(err)
		}
	}
	carry(d, 0, 4)
	refusesLate(t, b, bus.Outgoing{Data: []byte("late")})
	refusesLate(t, b, bus.Outgoing{Partition: 1, Kind: bus.Summary, Data: []byte("told late")})
	// What new partitions tell each other is not counted as carried over.
	if err := d.Carry(t.Context(), []bus.Outgoing{{Kind: bus.Summary, Data: []byte("told")}}, []time.Time{at}); err != nil {
		t.Fatal(err)
	}
	if last, err := d.LastSummary(t.Context(), 0); err != nil || last != 11 {
		t.Errorf("the last summary is at %d: %v", last, err)
	}
	shut(t, b)
	if _, err := bus.Open(t.Context(), setup); !errors.Is(err, bus.ErrDividing) {
		t.Fatalf("opened while a division is under way: %v", err)
	}

	// It goes on where it stood.
	b = open(t, setup, bus.ToDivide())
	if _, err := b.Divide(t.Context(), 4); !errors.Is(err, bus.ErrDividing) {
		t.Fatalf("divided into another number: %v", err)
	}
	if d, err = b.Divide(t.Context(), 3); err != nil {
		t.Fatal(err)
	}
	if !d.Begun() || carried(t, d) != 4 || d.Before() != 6 {
		t.Fatalf("%d carried, before %d", carried(t, d), d.Before())
	}
	b.SetAtomic(atomic)
	carry(d, 4, 7)
	if old, _ := readAll(t, b, 1); !cmp.Equal(old, []string{"4 4", "5 5", "6 told"}) {
		t.Errorf("the old partition 1 holds %q", old)
	}
	if err := d.Finish(t.Context()); err != nil {
		t.Fatal(err)
	}
	shut(t, b)

	// The new partitions.
	if _, err := bus.Open(t.Context(), setup); !errors.Is(err, bus.ErrPartitionsDiffer) {
		t.Fatalf("opened with the old number: %v", err)
	}
	b = open(t, with(setup, 3))
	if _, err := b.Publish(t.Context(), bus.Outgoing{Partition: 2, Data: []byte("new")}); err != nil {
		t.Fatal(err)
	}
	got, times := readAll(t, b, 2)
	if diff := cmp.Diff([]string{"9 carried 2", "13 carried 5", "15 new"}, got); diff != "" {
		t.Error(diff)
	}
	if !times[0].Equal(at.Add(2*time.Second)) || times[2].Before(time.Now().Add(-time.Hour)) {
		t.Errorf("stored at %v", times)
	}
	raw, err := b.At(t.Context(), 9)
	if err != nil || !raw.Stored.Equal(times[0]) || len(raw.Header["ce-id"]) != 1 || len(raw.Header["nats-expected-stream"]) > 0 {
		t.Errorf("%+v, %v", raw, err)
	}
	if id, err := b.Identity(t.Context()); err != nil || id.First != 7 || b.Begins() != 7 {
		t.Errorf("%+v, %v", id, err)
	}
	if got, _ := readAll(t, b, 0); !cmp.Equal(got, []string{"7 carried 0", "10 carried 3", "11 told", "14 carried 6"}) {
		t.Errorf("partition 0 holds %q", got)
	}
	if got := readSummaries(t, b, 0, 0); !cmp.Equal(got, []string{"11 told"}) {
		t.Errorf("partition 0 was told %q", got)
	}
}

// readSummaries reads what other partitions told one, after a position.
func readSummaries(t *testing.T, b *bus.Bus, partition int, after uint64) (texts []string) {
	t.Helper()
	ctx := deadline(t)
	last, err := b.LastSummary(ctx, partition)
	if err != nil {
		t.Fatal(err)
	}
	s, err := b.Summaries(ctx, partition, after)
	if err != nil {
		t.Fatal(err)
	}
	for s.Position() < last {
		raws, err := s.Next(ctx, nil, 100, 1<<20)
		if err != nil {
			t.Fatal(err)
		}
		for _, r := range raws {
			texts = append(texts, fmt.Sprintf("%d %s", r.Position, r.Data))
		}
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	return texts
}

// TestSummariesAreReadBesideTheSource reads what a partition is told past what its
// source has come to.
func TestSummariesAreReadBesideTheSource(t *testing.T) {
	b := open(t, with(bustest.Setup(t), 2))
	publish(t, b, 0, 1, 3)
	for p := range 2 {
		for i := range 2 {
			if _, err := b.Publish(t.Context(), bus.Outgoing{Partition: p, Kind: bus.Summary, Data: fmt.Appendf(nil, "told %d", i)}); err != nil {
				t.Fatal(err)
			}
		}
	}
	source, err := b.Source(t.Context(), 0, 0)
	if err != nil {
		t.Fatal(err)
	}
	if raws, err := source.Next(deadline(t), nil, 1, 1<<20); err != nil || raws[0].Position != 1 {
		t.Fatalf("%v, %v", raws, err)
	}
	if got := readSummaries(t, b, 0, 1); !cmp.Equal(got, []string{"4 told 0", "5 told 1"}) {
		t.Errorf("partition 0 was told %q", got)
	}
	if got := readSummaries(t, b, 0, 4); !cmp.Equal(got, []string{"5 told 1"}) {
		t.Errorf("after position 4 partition 0 was told %q", got)
	}
	if _, err := b.Summaries(t.Context(), 2, 0); !errors.Is(err, bus.ErrNoPartition) {
		t.Errorf("partition 2 of 2: %v", err)
	}
	if raws, err := source.Next(deadline(t), nil, 1, 1<<20); err != nil || raws[0].Position != 2 {
		t.Errorf("%v, %v", raws, err)
	}
	if err := source.Close(); err != nil {
		t.Fatal(err)
	}
}

// refusesLate checks that a message can't be published any more.
func refusesLate(t *testing.T, b *bus.Bus, out bus.Outgoing) {
	t.Helper()
	brief, cancel := context.WithTimeout(t.Context(), 300*time.Millisecond)
	defer cancel()
	if _, err := b.Publish(brief, out); err == nil {
		t.Errorf("published %q into a stream that is being divided", out.Data)
	}
}

func carried(t *testing.T, d *bus.Division) int {
	t.Helper()
	n, err := d.Carried(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	return n
}

func TestDivisionGivenUp(t *testing.T) {
	setup := bustest.Setup(t)
	b := open(t, setup, bus.ToDivide())
	publish(t, b, 0, 1, 3)
	d, err := b.Divide(t.Context(), 2)
	if err == nil {
		err = d.Begin(t.Context())
	}
	if err != nil {
		t.Fatal(err)
	}
	now := time.Now()
	err = d.Carry(t.Context(), []bus.Outgoing{{Data: []byte("a")}, {Partition: 1, Data: []byte("b")}}, []time.Time{now, now})
	if err != nil {
		t.Fatal(err)
	}
	if n, err := b.GiveUpDivision(t.Context()); err != nil || n != 2 {
		t.Fatalf("%d removed, %v", n, err)
	}
	if n, err := b.GiveUpDivision(t.Context()); err != nil || n != 0 {
		t.Fatalf("%d removed, %v", n, err)
	}
	shut(t, b)
	b = open(t, setup, bus.ToDivide())
	publish(t, b, 0, 4, 1)
	if got, _ := readAll(t, b, 0); len(got) != 4 { // and nothing is missing
		t.Fatalf("%q", got)
	}
	// What is whole may be divided again.
	if d, err = b.Divide(t.Context(), 2); err != nil || d.Begun() {
		t.Fatalf("%+v, %v", d, err)
	}
	if err := d.Begin(t.Context()); err != nil || carried(t, d) != 0 || d.Before() != 6 {
		t.Fatalf("%+v, %v", d, err)
	}
}

func TestTrimmedStreamIsNotDivided(t *testing.T) {
	b := open(t, bustest.Setup(t), bus.ToDivide())
	publish(t, b, 0, 1, 3)
	if err := b.Trim(t.Context(), 1); err != nil {
		t.Fatal(err)
	}
	if _, err := b.Divide(t.Context(), 2); !errors.Is(err, bus.ErrTrimmed) {
		t.Fatal(err)
	}
	publish(t, b, 0, 4, 1) // and is as it was
}
