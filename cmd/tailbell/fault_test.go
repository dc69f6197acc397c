package main

import (
	"context"
	"errors"
	"fmt"
	"math/rand/v2"
	"os"
	"path/filepath"
	"sync/atomic"
	"testing"
	"time"

	"tailbell/alert/outlet"
	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/life"
	"tailbell/monitor/partition"
	"tailbell/monitor/rehearse/ordeal"
	"tailbell/monitor/store"
)

// errFault is what happens instead of the k-th operation.
var errFault = errors.New("the fault that was ordered")

// faults counts the operations of a run and lets the k-th go wrong: once, or
// from then on all of them, as if the process had ended.
type faults struct {
	at    int64 // 0, 1, 2, ...; -1 for none
	crash bool
	count atomic.Int64
	fired atomic.Bool
}

// next is asked before (or after) every operation.
func (f *faults) next() error {
	n := f.count.Add(1) - 1
	if n == f.at || f.crash && f.fired.Load() {
		f.fired.Store(true)
		return errFault
	}
	return nil
}

// tap is an outlet that keeps what it took. Its faults come before it took a
// step, and after.
type tap struct {
	name   string
	faults *faults
	took   *[]delivery
}

func (o *tap) Name() string { return o.name }

func (o *tap) Deliver(_ context.Context, n *life.Notice) error {
	if err := o.faults.next(); err != nil {
		return err
	}
	event, err := outlet.CloudEvent("ordeal", n)
	if err != nil {
		return err
	}
	d, err := eventOf(event)
	if err != nil {
		return err
	}
	*o.took = append(*o.took, d)
	return o.faults.next()
}

// stream is a source of messages that are there already; the loop's context
// ends when all are committed.
type stream struct {
	raws    []wire.Raw
	decoder *wire.Decoder
}

func (s *stream) Next(ctx context.Context, limit int) (partition.Batch, error) {
	if len(s.raws) == 0 {
		<-ctx.Done()
		return partition.Batch{}, ctx.Err()
	}
	n := min(limit, len(s.raws))
	var b partition.Batch
	for _, raw := range s.raws[:n] {
		b.Messages = append(b.Messages, s.decoder.Decode(raw))
	}
	raws := s.raws[:n]
	b.Mark = func(i int) store.Mark {
		return store.Mark{Position: raws[i].Position, Stored: monitor.InstantOf(raws[i].Stored)}
	}
	s.raws = s.raws[n:]
	return b, nil
}

// bench is a partition without a bus: a store, and outlets that keep what they
// took across restarts.
type bench struct {
	t     *testing.T
	path  string
	raws  []wire.Raw
	batch int
	took  map[string]*[]delivery
}

var benchIdentity = store.Identity{Deployment: "ordeal", Partitions: 2, KeyParts: 1}

func newBench(t *testing.T, raws []wire.Raw, batch int) *bench {
	t.Helper()
	return &bench{
		t: t, path: filepath.Join(t.TempDir(), "s"), raws: raws, batch: batch,
		took: map[string]*[]delivery{"bus": {}, "ward": {}, "terminal": {}},
	}
}

// run opens the store and works until all is committed and delivered, or until
// something can't go on. It reports whether it came to the end.
func (b *bench) run(f *faults) (done bool) {
	o := store.Options{MapBytes: 1 << 24, Fault: func(string) error { return f.next() }}
	open := store.Open
	if _, err := os.Stat(b.path); err != nil {
		open = store.Create
	}
	st, err := open(b.path, benchIdentity, o)
	if err != nil {
		b.t.Fatal(err)
	}
	defer func() {
		if err := st.Close(); err != nil {
			b.t.Error(err)
		}
	}()
	for name := range b.took {
		if err := st.Outlets(store.FromOldest, name); err != nil {
			return b.broken(err)
		}
	}
	engine, err := partition.Recover(st)
	if err != nil {
		b.t.Fatal(err)
	}
	if err := b.read(st, engine, f); err != nil {
		return b.broken(err)
	}
	for name, took := range b.took {
		q := outlet.NewQueue(st, &tap{name, f, took}, outlet.QueueOptions{Random: rand.New(rand.NewPCG(1, 1))})
		// An outlet that fails is tried again; a store that does ends it.
		for tries := 0; ; tries++ {
			err := q.Flush(b.t.Context())
			if err == nil {
				break
			}
			if errors.Is(err, store.ErrFailed) || f.crash || tries == 2 {
				return b.broken(err)
			}
		}
	}
	return true
}

// read applies what the stream holds after the stored position.
func (b *bench) read(st *store.Store, engine *monitor.Engine, f *faults) error {
	after := engine.Position()
	s := &stream{raws: b.raws[after:], decoder: wire.NewDecoder(wire.Limits{})}
	if len(s.raws) == 0 {
		return nil
	}
	ctx, cancel := context.WithCancel(b.t.Context())
	defer cancel()
	last := b.raws[len(b.raws)-1].Position
	loop := partition.New(engine, st, s, partition.Options{MaxBatch: b.batch, Committed: func(position uint64) {
		if position == last {
			cancel()
		}
	}})
	return loop.Run(ctx)
}

func (b *bench) broken(err error) bool {
	b.t.Helper()
	if !errors.Is(err, errFault) && !errors.Is(err, store.ErrFailed) {
		b.t.Fatal(err)
	}
	return false
}

// outcome is what the store holds in the end.
func (b *bench) outcome() *outcome {
	b.t.Helper()
	return outcomeOf(b.t, b.path)
}

// TestFaultAtEveryOperation lets every operation of store and outlets fail in
// turn, or be the last one, until none is left; after each the run is taken up
// again, and must come to what a run without a fault came to.
func TestFaultAtEveryOperation(t *testing.T) {
	seed := *ordealSeed
	if seed == 0 {
		seed = rand.Uint64()
	}
	t.Logf("seed %d", seed)
	plan, err := ordeal.Generate(seed, ordeal.Options{Days: 45, Settings: 1})
	if err != nil {
		t.Fatal(err)
	}
	raws, _ := planned(plan, plan.Setups, 0)
	for i := range raws {
		raws[i].Stored = time.Date(2026, 3, 2, 12, 0, i, 0, time.UTC)
	}
	// Every operation in a long run, else each of so many, from a random one on.
	batch, stride := len(raws)/20, int64(97)
	switch {
	case *ordealKills > 0:
		stride = 1
	case os.Getenv("TAILBELL_CI") != "":
		stride = 13
	}
	without := newBench(t, raws, batch)
	if !without.run(&faults{at: -1}) {
		t.Fatal("a run without a fault broke off")
	}
	want := without.outcome()
	if len(want.alerts) < 3 {
		t.Errorf("only %d alerts", len(want.alerts))
	}
	fired := 0
	for _, crash := range []bool{false, true} {
		for k := rand.Int64N(stride); ; k += stride {
			f := &faults{at: k, crash: crash}
			b := newBench(t, raws, batch)
			for starts := 0; !b.run(f); starts++ {
				if starts == 3 {
					t.Fatalf("fault %d (crash %v): it does not come to an end", k, crash)
				}
				f.at, f.crash = -1, false // it happened; the next start is sound
			}
			if !f.fired.Load() {
				break
			}
			fired++
			compareOutcomes(t, fmt.Sprintf("fault %d (crash %v)", k, crash), want, b.outcome())
			for name, took := range b.took {
				checkDeliveries(t, fmt.Sprintf("fault %d (crash %v), %s", k, crash, name), *took, want.alerts, true)
			}
			if t.Failed() {
				return
			}
		}
	}
	t.Logf("%d faults over %d messages", fired, len(raws))
}
