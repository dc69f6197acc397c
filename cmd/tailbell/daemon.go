package main

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"
	"sync"
	"sync/atomic"
	"time"

	"github.com/rs/zerolog"

	"tailbell/alert/outlet"
	"tailbell/alert/page"
	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/control"
	"tailbell/ingest/intake"
	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/life"
	"tailbell/monitor/partition"
	"tailbell/monitor/store"
)

// daemon is everything that run and demo keep running: the bus, and for each
// partition its store, engine and loop with the outlets behind.
type daemon struct {
	setup *config.Setup
	bus   *bus.Bus
	log   zerolog.Logger
	parts []*part
	serve *control.Server
	page  *page.Page // nil for none

	troubles troubles
	copies   copies
	ending   chan struct{} // closed when run is to end
}

// part is one partition at work.
type part struct {
	number int
	store  *store.Store
	intake *intake.Intake
	loop   *partition.Loop
	ticker *intake.Ticker
	queues []*outlet.Queue
	noRoom atomic.Bool // the last commit found no room

	mu struct {
		sync.Mutex
		position uint64        // committed
		moved    chan struct{} // closed at the next commit
	}
}

// daemonOptions are what the two commands do differently.
type daemonOptions struct {
	log      zerolog.Logger
	terminal outlet.Outlet // nil for none
	// onTerminal says which steps it shows; nil for all.
	onTerminal func(*life.Notice) bool
	maxBatch   int
	busOpts    []bus.Option
	now        func() time.Time // by which the bus's clock is judged; nil for time.Now
}

// openDaemon opens the bus and recovers every partition. What fails is closed
// again.
func openDaemon(ctx context.Context, setup *config.Setup, o daemonOptions) (d *daemon, err error) {
	if err := checkFolder(setup); err != nil {
		return nil, err
	}
	d = &daemon{setup: setup, log: o.log, ending: make(chan struct{})}
	b, err := bus.Open(ctx, setup, append(o.busOpts, bus.WithLog(o.log), bus.WithState(d.busState))...)
	if err != nil {
		return nil, err
	}
	d.bus = b
	defer func() {
		if err != nil {
			err = errors.Join(err, d.close())
		}
	}()
	for _, note := range b.Notes() {
		d.log.Warn().Str("bus", note).Msg("the streams differ from the set-up, without harm")
	}
	for n := range setup.Partitions {
		p, err := d.openPart(ctx, n, o)
		if err != nil {
			return d, fmt.Errorf("partition %d: %w", n, err)
		}
		d.parts = append(d.parts, p)
	}
	d.serve, err = control.Serve(ctx, b, d.verbs())
	return d, err
}

// announceSetup publishes the set-up into the partition's stream, unless it is
// the one last published there. One that a store could not take is an error.
func announceSetup(ctx context.Context, b *bus.Bus, setup *config.Setup, partition int) error {
	raw, found, err := b.LastSetting(ctx, partition)
	if err != nil {
		return err
	}
	if found {
		old, err := config.Parse(raw.Data, "the set-up in force")
		if err == nil && old.Digest == setup.Digest {
			return nil
		}
		if err == nil {
			if why := monitor.Unfit(old, setup); why != "" {
				return unfitSetup(why)
			}
		}
	}
	_, err = b.Publish(ctx, bus.Outgoing{Partition: partition, Kind: bus.Setting, Data: setup.Text})
	return err
}

// followsStored refuses a set-up that can't follow the one that the store was
// built by: the stream may have been trimmed, or have dropped by age what says
// so too.
func followsStored(st *store.Store, setup *config.Setup) error {
	settings, err := st.Settings()
	if err != nil || len(settings) == 0 {
		return err
	}
	last := settings[len(settings)-1]
	if last.Digest == setup.Digest {
		return nil
	}
	old, err := config.Parse(last.Text, "the set-up in force")
	if err != nil {
		return nil //nolint:nilerr // of another version, which the engine judges
	}
	if why := monitor.Unfit(old, setup); why != "" {
		return unfitSetup(why)
	}
	return nil
}

func unfitSetup(why string) error {
	return fmt.Errorf("this set-up can't follow the one in force: %s\n"+
		"Keep the old values, or begin anew with another folder and name", why)
}

func storePath(setup *config.Setup, partition int) string {
	return filepath.Join(setup.Folder, fmt.Sprintf("partition-%d.store", partition))
}

func identityOf(setup *config.Setup, partition int) store.Identity {
	return store.Identity{Deployment: setup.Name, Partition: partition, Partitions: setup.Partitions, KeyParts: setup.KeyParts}
}

func openStore(setup *config.Setup, partition int) (*store.Store, error) {
	path := storePath(setup, partition)
	if _, err := os.Stat(path); errors.Is(err, fs.ErrNotExist) {
		return store.Create(path, identityOf(setup, partition), store.Options{})
	}
	return store.Open(path, identityOf(setup, partition), store.Options{})
}

func (d *daemon) openPart(ctx context.Context, number int, o daemonOptions) (p *part, err error) {
	st, err := openStore(d.setup, number)
	if err != nil {
		return nil, err
	}
	p = &part{number: number, store: st}
	p.mu.moved = make(chan struct{})
	defer func() {
		if err != nil {
			err = errors.Join(err, p.close())
		}
	}()
	if err := intake.Verify(ctx, d.bus, st); err != nil {
		return p, err
	}
	if err := followsStored(st, d.setup); err != nil {
		return p, err
	}
	// Only now may anything be published: the stream is known to be the one.
	if err := announceSetup(ctx, d.bus, d.setup, number); err != nil {
		return p, err
	}
	epoch, err := st.Epoch()
	if err != nil {
		return p, err
	}
	if err := st.SetEpoch(epoch + 1); err != nil {
		return p, err
	}
	if err := d.openOutlets(p, o, epoch+1); err != nil {
		return p, err
	}
	engine, err := partition.Recover(st)
	if err != nil {
		return p, err
	}
	p.mu.position = engine.Position()
	if err := d.openIntake(ctx, p, o.now); err != nil {
		return p, err
	}
	p.loop = partition.New(engine, st, p.intake, partition.Options{
		MaxBatch: o.maxBatch, Committed: func(position uint64) { d.committed(p, position) },
		Full: func(ctx context.Context, err error) error { return d.full(ctx, p, err) },
	})
	p.ticker = intake.NewTicker(p.loop.Due, func(ctx context.Context) error {
		if p.intake.Held() != nil {
			return nil // it would only queue up behind what is held
		}
		_, err := d.bus.Publish(ctx, bus.Outgoing{Partition: number, Kind: bus.Tick})
		return err
	}, func(err error) { d.log.Error().Err(err).Msg("publishing a tick") })
	return p, nil
}

// openIntake begins to read the partition's stream where the store stands.
func (d *daemon) openIntake(ctx context.Context, p *part, now func() time.Time) error {
	if now == nil {
		now = time.Now
	}
	marks, err := p.store.Marks()
	if err != nil {
		return err
	}
	o := intake.Options{
		After: p.mu.position, Stored: monitor.Beginning, Now: now,
		Gap:  func(m bus.Missing) { d.gap(p.number, m) },
		Held: func(h *intake.Hold) { d.held(p.number, h) },
	}
	if len(marks) > 0 {
		o.Stored = marks[0].Stored
	}
	p.intake, err = intake.Open(ctx, d.bus, d.setup, p.number, o)
	return err
}

// full waits before a commit that found no room is tried again.
func (d *daemon) full(ctx context.Context, p *part, err error) error {
	d.log.Error().Err(err).Msg("intake stands still")
	p.noRoom.Store(true)
	d.troubles.set(troubleNoRoom, p.number, "the intake stands still: "+err.Error())
	select {
	case <-time.After(2 * time.Second):
		return nil
	case <-d.ending: // the stream brings it again
		return err
	case <-ctx.Done():
		return ctx.Err()
	}
}

// committed notes a commit and wakes what waits for one.
func (d *daemon) committed(p *part, position uint64) {
	if p.noRoom.CompareAndSwap(true, false) {
		d.log.Info().Int("partition", p.number).Msg("there is room again")
		d.troubles.clear(troubleNoRoom, p.number)
	}
	p.mu.Lock()
	if position > 0 {
		p.mu.position = position
	}
	close(p.mu.moved)
	p.mu.moved = make(chan struct{})
	p.mu.Unlock()
	for _, q := range p.queues {
		q.Wake()
	}
	p.ticker.Wake()
	if d.page != nil {
		d.page.Committed()
	}
}

// reach waits until the position is committed.
func (p *part) reach(ctx context.Context, position uint64) error {
	for {
		p.mu.Lock()
		have, moved := p.mu.position, p.mu.moved
		p.mu.Unlock()
		if have >= position {
			return nil
		}
		select {
		case <-moved:
		case <-ctx.Done():
			return ctx.Err()
		}
	}
}

// run runs all partitions until ctx ends or something fails, then delivers
// what waits in the outlets.
func (d *daemon) run(ctx context.Context) error {
	ctx, stop := context.WithCancelCause(ctx)
	defer stop(nil)
	context.AfterFunc(ctx, func() { close(d.ending) })
	var running sync.WaitGroup
	start := func(f func(context.Context) error) {
		running.Go(func() {
			if err := f(ctx); err != nil {
				stop(err)
			}
		})
	}
	for _, p := range d.parts {
		start(func(ctx context.Context) error { return d.explain(p, p.loop.Run(ctx)) })
		for _, q := range p.queues {
			start(q.Run)
		}
		running.Go(func() { p.ticker.Run(ctx) })
	}
	if !d.setup.History {
		start(d.goLive)
	}
	start(d.watchRoom)
	running.Wait()
	if err := context.Cause(ctx); err != nil && !errors.Is(err, context.Canceled) {
		return err
	}
	d.flush()
	return nil
}

// explain says how far the stream differs from the store if that is what ended
// the loop.
func (d *daemon) explain(p *part, err error) error {
	if !errors.Is(err, bus.ErrBeyondEnd) && !errors.Is(err, bus.ErrStreamReplaced) {
		return err
	}
	ctx, cancel := context.WithTimeout(context.Background(), busPatience)
	defer cancel()
	diff, compareErr := intake.Compare(ctx, d.bus, p.store)
	if compareErr != nil || diff == nil {
		return err
	}
	return fmt.Errorf("partition %d: %w", p.number, diff)
}

// liveAgain is how long to wait before it is tried again to go live.
const liveAgain = time.Second

// goLive ends history time once the partitions have read what the stream held
// at the start. A bus that is away is waited for.
func (d *daemon) goLive(ctx context.Context) error {
	for _, p := range d.parts {
		for ctx.Err() == nil {
			err := d.goLivePart(ctx, p)
			if err == nil {
				d.log.Info().Int("partition", p.number).Msg("live")
				break
			}
			if ctx.Err() == nil {
				d.log.Error().Err(err).Int("partition", p.number).Msg("going live")
			}
			select {
			case <-time.After(liveAgain):
			case <-ctx.Done():
			}
		}
	}
	return nil
}

func (d *daemon) goLivePart(ctx context.Context, p *part) error {
	end, err := d.bus.EndOf(ctx, p.number)
	if err != nil {
		return err
	}
	if err := p.reach(ctx, end); err != nil {
		return err
	}
	var history bool
	if err := p.loop.Do(ctx, func(e *monitor.Engine) { history = e.InHistory() }); err != nil || !history {
		return err
	}
	_, err = d.bus.Publish(ctx, bus.Outgoing{
		Partition: p.number, Kind: bus.Tick, Header: map[string][]string{wire.LiveHeader: {"1"}},
	})
	return err
}

// flush delivers what still waits, each outlet beside the others. An outlet
// that is down keeps its steps: they are delivered at the next start.
func (d *daemon) flush() {
	ctx, cancel := context.WithTimeout(context.Background(), 5*time.Second)
	defer cancel()
	var flushing sync.WaitGroup
	for _, p := range d.parts {
		for _, q := range p.queues {
			flushing.Go(func() {
				if err := q.Flush(ctx); err != nil {
					d.log.Error().Err(err).Str("outlet", q.Name()).Int("partition", p.number).Msg("steps stay undelivered for now")
				}
			})
		}
	}
	flushing.Wait()
}

// close lets go of everything.
func (d *daemon) close() error {
	var errs []error
	if d.page != nil {
		d.page.Close()
	}
	if d.serve != nil {
		errs = append(errs, d.serve.Close())
	}
	d.copies.all.Wait()
	for _, p := range d.parts {
		errs = append(errs, p.close())
	}
	return errors.Join(append(errs, d.bus.Close())...)
}

func (p *part) close() error {
	var errs []error
	if p.intake != nil {
		errs = append(errs, p.intake.Close())
	}
	return errors.Join(append(errs, p.store.Close())...)
}

// partOf returns the partition that a series belongs to.
func (d *daemon) partOf(series string) *part {
	return d.parts[config.PartitionOf(series, d.setup.KeyParts, len(d.parts))]
}

// find returns an alert and the partition that holds it.
func (d *daemon) find(id string) (life.Record, *part, error) {
	for _, p := range d.parts {
		row, err := p.store.Alert(id)
		if err == nil {
			return row.Record, p, nil
		}
		if !errors.Is(err, store.ErrNotFound) {
			return life.Record{}, nil, err
		}
	}
	return life.Record{}, nil, control.Errorf(codeNotFound, "no alert %q: tailbell alert list shows them", id)
}
