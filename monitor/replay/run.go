package replay

import (
	"context"
	"fmt"
	"runtime"
	"sync"
	"sync/atomic"

	"tailbell/config"
	"tailbell/monitor"
)

// Options say how a tape is played.
type Options struct {
	// Until is the time up to which the history is complete, if HasUntil: the
	// clock is moved there after the last row.
	Until    monitor.Instant
	HasUntil bool
	// Workers is how many groups are played at once; 0 for as many as there
	// are cores. It changes nothing but the time taken.
	Workers int
	// Whole plays all series by one engine.
	Whole bool
	// Chances computes the p-value of every look, for Result.Chances.
	Chances bool
	// Progress, if not nil, is called now and then with how many of all rows
	// have been played; perhaps from several goroutines at once.
	Progress func(done, of int)
	// Look, if not nil, is called for every look made or withheld when due, in
	// the engine's order within its group; for several groups at once. Done is
	// called when a group has ended, in order of the groups, never two at once.
	Look func(group int, v *monitor.View)
	Done func(group int) error
}

// checkEvery is after how many rows progress is told and cancellation seen.
const checkEvery = 4096

// Run plays a tape under a set-up. The tape must be sorted, and is not changed.
// The error is the context's, or that of Done.
func Run(ctx context.Context, setup *config.Setup, t *Tape, o Options) (*Result, error) {
	p := newPlan(t, setup, o.Whole)
	if p.whole == "" {
		r, full, err := p.run(ctx, o)
		if err != nil || !full {
			return r, err
		}
		p.whole = "limits.max_ids might be reached"
		if o.Look != nil {
			return nil, fmt.Errorf("more ids may be kept at once than limits.max_ids = %d allows: raise it", setup.Limits.MaxIDs)
		}
	}
	p.groups = [][]uint32{nil}
	r, _, err := p.run(ctx, o)
	return r, err
}

// player plays the groups of a plan.
type player struct {
	*plan
	opts    Options
	results []*part
	done    atomic.Int64
	order   *turns
}

// run plays all groups. full says that the parts may have kept more ids at
// once than the whole would have.
func (p *plan) run(ctx context.Context, o Options) (r *Result, full bool, err error) {
	workers := o.Workers
	if workers <= 0 {
		workers = runtime.GOMAXPROCS(0)
	}
	if o.Progress == nil {
		o.Progress = func(int, int) {}
	}
	pl := &player{plan: p, opts: o, results: make([]*part, len(p.groups)), order: newTurns()}
	ctx, cancel := context.WithCancelCause(ctx)
	defer cancel(nil)
	var next atomic.Int64
	var all sync.WaitGroup
	for range min(workers, len(p.groups)) {
		all.Go(func() {
			known := &monitor.KnownChances{}
			for {
				g := int(next.Add(1)) - 1
				if g >= len(p.groups) || ctx.Err() != nil {
					return
				}
				if err := pl.play(ctx, g, known); err != nil {
					cancel(err)
					pl.order.stop()
					return
				}
			}
		})
	}
	all.Wait()
	if ctx.Err() != nil {
		return nil, false, context.Cause(ctx)
	}
	o.Progress(p.tape.n, p.tape.n)
	r = p.merge(pl.results)
	return r, len(p.groups) > 1 && r.mostIDs > p.setup.Limits.MaxIDs, nil
}

// play plays one group by an engine of its own.
func (pl *player) play(ctx context.Context, g int, known *monitor.KnownChances) error {
	e := monitor.New(monitor.Partition{Of: 1, KeyParts: pl.setup.KeyParts})
	e.Pass()
	if pl.opts.Chances {
		e.KeepChances(known)
	}
	if pl.opts.Look != nil {
		e.OnLook(func(v monitor.View) { pl.opts.Look(g, &v) })
	}
	e.Apply(&monitor.Message{Position: settingAt, Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: pl.setup}})
	found := &part{}
	if err := pl.feed(ctx, e, found, g); err != nil {
		return err
	}
	after := positionOf(pl.tape.n)
	if pl.end != monitor.Beginning {
		e.Apply(tickAt(after, pl.end))
	}
	if pl.opts.HasUntil {
		e.Apply(tickAt(after+1, pl.opts.Until))
	}
	found.take(e, e.Clock())
	found.finish(e)
	pl.results[g] = found
	if pl.opts.Done == nil {
		return nil
	}
	return pl.order.take(g, func() error { return pl.opts.Done(g) })
}

// feed applies the group's rows.
func (pl *player) feed(ctx context.Context, e *monitor.Engine, found *part, g int) error {
	m := monitor.Message{Items: make([]monitor.Item, 1)}
	n := len(pl.groups[g])
	if pl.whole != "" {
		n = pl.tape.n
	}
	told := 0
	for k := range n {
		i := k
		if pl.whole == "" {
			i = int(pl.groups[g][k])
			pl.keepClock(e, i)
		}
		pl.tape.fill(&m, i)
		e.Apply(&m)
		if e.Found() {
			found.take(e, m.Time)
		}
		if k%checkEvery == checkEvery-1 || k == n-1 {
			pl.opts.Progress(int(pl.done.Add(int64(k+1-told))), pl.tape.n)
			told = k + 1
			if err := ctx.Err(); err != nil {
				return err
			}
			found.take(e, m.Time)
		}
	}
	return nil
}

// keepClock tells the engine the clock of the whole where its own rows don't.
func (pl *player) keepClock(e *monitor.Engine, i int) {
	at, told := pl.clocks[uint32(i)]
	if !told {
		if e.Clock() != monitor.Beginning {
			return
		}
		at = pl.begin
	}
	if pl.begin == monitor.Beginning || at == monitor.Beginning || at > pl.tape.row(i).time {
		return // the whole has no clock yet either
	}
	e.Apply(tickAt(positionOf(i)-1, at))
}

func tickAt(position uint64, at monitor.Instant) *monitor.Message {
	return &monitor.Message{Position: position, Kind: monitor.Tick, Stored: at, Time: at, HasTime: true}
}

// turns lets groups end in their order.
type turns struct {
	mu      sync.Mutex
	next    int
	stopped bool
	change  *sync.Cond
}

func newTurns() *turns {
	t := &turns{}
	t.change = sync.NewCond(&t.mu)
	return t
}

// take waits until all groups before this one have ended, and ends it.
func (t *turns) take(group int, end func() error) error {
	t.mu.Lock()
	defer t.mu.Unlock()
	for t.next != group && !t.stopped {
		t.change.Wait()
	}
	if t.stopped {
		return nil
	}
	err := end()
	t.next++
	t.change.Broadcast()
	return err
}

func (t *turns) stop() {
	t.mu.Lock()
	defer t.mu.Unlock()
	t.stopped = true
	t.change.Broadcast()
}
