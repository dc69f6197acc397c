package claim

import (
	"context"
	"errors"
	"flag"
	"fmt"
	"maps"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"tailbell/ingest/bus"
)

var (
	modelSeed = flag.Uint64("model.seed", 0, "the `SEED` of one run of the model; 0 for many")
	modelRuns = flag.Int("model.runs", 100, "how `MANY` runs of the model")
)

const (
	span       = 3 * time.Second
	partitions = 4
)

var errRefused = errors.New("the bus does not answer")

// world is a bus in memory, and the processes that share it. Everything happens
// in one goroutine: a process that waits for the bus may find that others have
// taken many turns meanwhile, and that much time has gone by.
type world struct {
	random  *rand.Rand
	began   time.Time
	entries map[string]bus.Entry
	past    []map[string]bus.Entry // what replicas may still answer
	seq     uint64
	log     map[int][]logged // by partition, all that was stored
	steps   map[int]uint64   // by partition, rows that the stream leads to by now
	members []*process
	depth   int
	calm    bool // no more faults
	over    bool // nothing new comes any more
	open    bool // without a fence: whatever is published is stored
	owners  map[int][]uint64
	faults  []string
}

// logged is a message in the stream of alerts; id is "" for a mark.
type logged struct {
	bus.Published
	id string
}

func (w *world) fault(format string, args ...any) {
	w.faults = append(w.faults, fmt.Sprintf(format, args...))
}

func (w *world) chance(percent int) bool { return !w.calm && w.random.IntN(100) < percent }

// meanwhile lets others work, and time go by.
func (w *world) meanwhile() {
	if w.depth > 2 || !w.chance(12) {
		return
	}
	w.depth++
	defer func() { w.depth-- }()
	time.Sleep(time.Duration(w.random.Int64N(int64(2 * span))))
	for range w.random.IntN(8) {
		w.something()
	}
}

// process is a member with its stores.
type process struct {
	w      *world
	folder string
	starts int
	busy   bool
	stop   bool // it has left
	k      *Keeper
	parts  map[int]*work
	stores map[int]uint64 // epochs of the stores in its folder
	events []Event
}

// work is a partition that is open.
type work struct {
	claim     Holding
	fence     *Fence
	committed uint64 // rows in its outbox
	sent      uint64
}

func (p *process) start() {
	p.starts++
	p.parts, p.events, p.stop = map[int]*work{}, nil, false
	digest := "one"
	if p.starts > 1 && !p.w.calm && p.w.random.IntN(8) == 0 {
		digest = "another"
	}
	p.k = NewKeeper(Options{
		Board: &view{p}, Folder: p.folder, Start: fmt.Sprint(p.starts), Digest: digest, Partitions: partitions, Span: span,
		Now:   func() time.Duration { return time.Since(p.w.began) },
		Local: func(n int) uint64 { return p.stores[n] },
		Marks: func(n int) (Marks, bool) {
			if part := p.parts[n]; part != nil {
				return Marks{Position: part.committed, Told: map[string]uint64{"bus": part.sent}, Origin: "in"}, true
			}
			return Marks{}, false
		},
		Tell: func(e Event) { p.events = append(p.events, e) },
	})
}

// view is the bus as one process sees it.
type view struct{ p *process }

func (v *view) All(context.Context) ([]bus.Entry, error) {
	w := v.p.w
	w.meanwhile()
	if w.chance(5) {
		return nil, errRefused
	}
	from := w.entries
	if w.chance(10) && len(w.past) > 0 {
		from = w.past[w.random.IntN(len(w.past))]
	}
	var list []bus.Entry
	for _, key := range slices.Sorted(maps.Keys(from)) {
		list = append(list, from[key])
	}
	w.meanwhile()
	return list, nil
}

func (v *view) PutAll(_ context.Context, puts []bus.Put) []bus.Outcome {
	w := v.p.w
	outcomes := make([]bus.Outcome, len(puts))
	for i, p := range puts {
		w.meanwhile()
		if w.chance(5) {
			outcomes[i].Err = errRefused
			continue
		}
		if w.entries[p.Key].Revision != p.Revision {
			outcomes[i].Err = bus.ErrConflict
			continue
		}
		if w.past = append(w.past, maps.Clone(w.entries)); len(w.past) > 5 {
			w.past = w.past[1:]
		}
		w.seq++
		w.entries[p.Key] = bus.Entry{Key: p.Key, Value: p.Value, Revision: w.seq}
		outcomes[i].Revision = w.seq
		if w.chance(5) {
			outcomes[i] = bus.Outcome{Err: errRefused} // only the acknowledgement is lost
		}
	}
	w.meanwhile()
	return outcomes
}

func (v *view) LastPublished(_ context.Context, n int) (bus.Published, error) {
	w := v.p.w
	w.meanwhile()
	log := w.log[n]
	switch {
	case w.chance(5):
		return bus.Published{}, errRefused
	case len(log) == 0:
		return bus.Published{}, nil
	case w.chance(10):
		return log[max(0, len(log)-1-w.random.IntN(3))].Published, nil
	}
	return log[len(log)-1].Published, nil
}

func (v *view) PublishOwned(_ context.Context, m *bus.OwnerMessage) (uint64, bool, error) {
	w := v.p.w
	w.meanwhile()
	log := w.log[m.Partition]
	if w.chance(5) {
		return 0, false, errRefused
	}
	if uint64(len(log)) != m.Position && !w.open {
		return 0, false, bus.ErrConflict
	}
	stored := logged{m.Published, m.ID}
	stored.Position = uint64(len(log) + 1)
	w.log[m.Partition] = append(log, stored)
	if w.chance(5) {
		return 0, false, errRefused
	}
	return stored.Position, false, nil
}

// something lets a process that is not waiting do one thing.
func (w *world) something() {
	p := w.members[w.random.IntN(len(w.members))]
	if p.busy {
		return
	}
	p.busy = true
	defer func() { p.busy = false }()
	p.act(w.random.IntN(40))
	w.look()
}

func (p *process) act(what int) {
	w, ctx := p.w, context.Background()
	switch {
	case what == 0 && !w.calm: // killed, and started again
		p.start()
	case what == 1 && !w.calm:
		p.take()
		_ = p.k.Leave(ctx) //nolint:errcheck // refusals are part of it
		for n := range partitions {
			p.close(n)
			_ = p.k.Release(ctx, n) //nolint:errcheck // refusals are part of it
		}
		p.stop = true
	case p.stop:
		if w.calm || what < 10 {
			p.start()
		}
	case what < 8:
		_ = p.k.Turn(ctx) //nolint:errcheck // refusals are part of it
		p.take()
	case what < 12 && !w.over:
		w.steps[w.random.IntN(partitions)]++
	default:
		p.workAll(ctx)
	}
	p.take()
}

// take does what the keeper has told.
func (p *process) take() {
	for len(p.events) > 0 {
		e := p.events[0]
		p.events = p.events[1:]
		switch e.Kind {
		case Won:
			p.win(e)
		case Lost:
			delete(p.parts, e.Partition)
		case Surplus:
			p.close(e.Partition)
			_ = p.k.Release(context.Background(), e.Partition) //nolint:errcheck // refusals are part of it
		case Renewed, Waiting:
		}
	}
}

func (p *process) win(e Event) {
	w, n := p.w, e.Partition
	w.owners[n] = append(w.owners[n], e.Claim.Epoch)
	part := &work{claim: e.Claim, fence: NewFence(&view{p}, n, e.Claim.Epoch, "in", true), sent: e.Claim.Told["bus"]}
	if p.stores[n] < e.Claim.Stored && w.steps[n] > 0 { // a copy, of some time before
		part.committed = w.random.Uint64N(w.steps[n] + 1)
	} else {
		part.committed = e.Claim.Position
	}
	p.stores[n] = e.Claim.Epoch
	p.parts[n] = part
}

func (p *process) close(numbers ...int) {
	for _, n := range numbers {
		delete(p.parts, n)
	}
}

func (p *process) workAll(ctx context.Context) {
	for _, n := range slices.Sorted(maps.Keys(p.parts)) {
		if part := p.parts[n]; part != nil { // it may be lost meanwhile
			p.work(ctx, n, part)
		}
	}
}

// work commits and publishes a little.
func (p *process) work(ctx context.Context, n int, part *work) {
	w := p.w
	if more := w.steps[n] - min(part.committed, w.steps[n]); more > 0 {
		part.committed += 1 + w.random.Uint64N(more)
	}
	if part.fence.Take(ctx) != nil {
		return
	}
	if row, _ := part.fence.Row(); row > part.sent {
		part.sent = row
	}
	for part.sent < part.committed {
		row := part.sent + 1
		err := part.fence.Publish(ctx, &Step{Row: row, Key: fmt.Sprint(row), Event: []byte("{}")})
		if err != nil {
			return
		}
		part.sent = row
	}
}

// look checks what must hold at every moment.
func (w *world) look() {
	for n := range partitions {
		var holders []string
		for _, p := range w.members {
			if !p.stop && p.k.Holds(n) {
				holders = append(holders, p.k.Name())
			}
		}
		if len(holders) > 1 {
			w.fault("partition %d is held by %s", n, strings.Join(holders, " and "))
		}
	}
}

// check checks what was published: every row once, in order, under epochs that
// grow.
func (w *world) check() {
	for n := range partitions {
		row, epoch := uint64(0), uint64(0)
		for _, m := range w.log[n] {
			switch {
			case m.id == "" && m.Epoch <= epoch:
				w.fault("partition %d: the mark of epoch %d after that of %d", n, m.Epoch, epoch)
			case m.id == "" && m.Row != row:
				w.fault("partition %d: a mark says row %d after %d", n, m.Row, row)
			case m.id != "" && m.Epoch != epoch:
				w.fault("partition %d: row %s of epoch %d after the mark of %d", n, m.id, m.Epoch, epoch)
			case m.id != "" && m.Row != row+1:
				w.fault("partition %d: row %d after %d", n, m.Row, row)
			}
			row, epoch = m.Row, m.Epoch
		}
		if row != w.steps[n] {
			w.fault("partition %d: %d of %d rows were published", n, row, w.steps[n])
		}
		given := map[uint64]bool{}
		for _, e := range w.owners[n] {
			if given[e] {
				w.fault("partition %d: epoch %d was given out twice", n, e)
			}
			given[e] = true
		}
	}
}

// life is one run of the model, and what went wrong in it.
func life(t *testing.T, seed uint64, open bool) (w *world) {
	t.Helper()
	synctest.Test(t, func(*testing.T) {
		w = &world{
			random: rand.New(rand.NewPCG(seed, 1)), began: time.Now(), entries: map[string]bus.Entry{}, open: open,
			log: map[int][]logged{}, steps: map[int]uint64{}, owners: map[int][]uint64{},
		}
		for _, folder := range []string{"a", "b", "c"} {
			p := &process{w: w, folder: folder, stores: map[int]uint64{}}
			p.start()
			w.members = append(w.members, p)
		}
		for range 400 {
			time.Sleep(time.Duration(w.random.Int64N(int64(span / 6))))
			w.something()
		}
		for _, w.over = range []bool{false, true} {
			w.calm = true
			for range 400 {
				time.Sleep(span / 30)
				for range 3 {
					w.something()
				}
			}
		}
		for _, p := range w.members {
			for n, part := range p.parts {
				part.committed = max(part.committed, w.steps[n])
			}
			p.workAll(context.Background())
		}
		w.check()
	})
	return w
}

// TestModel lets processes share partitions on a bus that refuses, forgets to
// acknowledge and answers late, while they are paused, killed, started and
// stopped: every row of every partition is published once.
func TestModel(t *testing.T) {
	seeds := []uint64{*modelSeed}
	if *modelSeed == 0 {
		first := rand.Uint64() >> 20
		seeds = nil
		for i := range *modelRuns {
			seeds = append(seeds, first+uint64(i))
		}
	}
	marks, rows := 0, 0
	for _, seed := range seeds {
		w := life(t, seed, false)
		if len(w.faults) > 0 {
			t.Fatalf("-model.seed %d:\n%s", seed, strings.Join(w.faults[:min(8, len(w.faults))], "\n"))
		}
		for _, log := range w.log {
			for _, m := range log {
				if m.id == "" {
					marks++
				} else {
					rows++
				}
			}
		}
	}
	t.Logf("%d runs from seed %d: %d owners followed each other, %d rows", len(seeds), seeds[0], marks, rows)
	if len(seeds) > 10 && (marks < 5*len(seeds) || rows < 20*len(seeds)) {
		t.Error("next to nothing happened")
	}
}

// TestModelNeedsTheFence takes the fence away: then rows are doubled.
func TestModelNeedsTheFence(t *testing.T) {
	for seed := range uint64(100) {
		if w := life(t, seed+1, true); len(w.faults) > 0 {
			t.Logf("seed %d: %s", seed+1, w.faults[0])
			return
		}
	}
	t.Error("without a fence nothing is doubled: the model tries too little")
}
