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

	"tailbell/alert/outlet"
	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/claim"
	"tailbell/ingest/control"
	"tailbell/ingest/copies"
	"tailbell/ingest/intake"
	"tailbell/monitor"
	"tailbell/monitor/partition"
	"tailbell/monitor/store"
)

// part is one partition at work.
type part struct {
	number int
	store  *store.Store
	intake *intake.Intake
	loop   *partition.Loop
	ticker *intake.Ticker
	queues []*outlet.Queue
	teller *teller
	fence  *claim.Fence // nil for an embedded bus
	origin string       // when the stream was made, that the store is filled from
	// told is what the owner before had told its outlets, by the same rows.
	told map[string]uint64
	// lastCopy is the last copy on the bus, nil while none is known.
	lastCopy atomic.Pointer[copies.Copy]
	copied   atomic.Uint64 // position of the last copy on the bus
	copyNow  chan struct{} // a copy is wanted at once
	noRoom   atomic.Bool   // the last commit found no room
	// taken is when the partition became this process's, opened when it ran; the
	// zero times where no processes share the partitions. first is for what is said
	// of the first commit since.
	taken, opened time.Time
	epoch         uint64
	first         sync.Once

	// stop ends what startPart began, which running waits for. gone ends with the
	// loop: nothing is asked of the engine any more.
	stop    context.CancelFunc
	running sync.WaitGroup
	gone    context.Context //nolint:containedctx // the part's own life
	leave   context.CancelFunc
	stale   chan struct{} // closed when another owner's mark was found
	staled  sync.Once

	mu struct {
		sync.Mutex
		position uint64        // committed
		moved    chan struct{} // closed at the next commit
	}
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

// originOf says from what the rows of an outbox are counted: when the stream was
// made, and how often it was divided since.
func originOf(stream store.StreamIdentity, divisions uint64) string {
	origin := stream.Created.UTC().Format(time.RFC3339Nano)
	if divisions > 0 {
		origin += fmt.Sprintf(" division %d", divisions)
	}
	return origin
}

// openPart opens a partition: c is the claim by which it is owned, nil for an
// embedded bus.
func (d *daemon) openPart(ctx context.Context, number int, c *claim.Holding) (p *part, err error) {
	st, err := d.openOwnStore(ctx, number, c)
	if err != nil {
		return nil, err
	}
	p = &part{number: number, store: st, stale: make(chan struct{}), copyNow: make(chan struct{}, 1)}
	p.gone, p.leave = context.WithCancel(context.Background())
	p.mu.moved = make(chan struct{})
	defer func() {
		if err != nil {
			err = errors.Join(err, p.close())
		}
	}()
	if err := intake.Verify(ctx, d.bus, st); err != nil {
		return p, err
	}
	stream, _, err := st.Stream()
	if err != nil {
		return p, err
	}
	p.origin = originOf(stream, d.bus.Divisions())
	if c != nil && c.Origin == p.origin {
		p.told = c.Told
	}
	if err := followsStored(st, d.setup); err != nil {
		return p, err
	}
	// Only now may anything be published: the stream is known to be the one.
	if err := announceSetup(ctx, d.bus, d.setup, number); err != nil {
		return p, err
	}
	epoch, err := d.succeed(ctx, p, c)
	if err != nil {
		return p, err
	}
	if err := st.SetEpoch(epoch); err != nil {
		return p, err
	}
	p.epoch = epoch
	if d.member != nil {
		d.member.noteEpoch(number, epoch)
	}
	if err := d.openOutlets(p, epoch, c); err != nil {
		return p, err
	}
	engine, err := partition.Recover(st)
	if err != nil {
		return p, err
	}
	p.mu.position = engine.Position()
	p.teller = newTeller(st, d.bus, d.log)
	if err := d.openIntake(ctx, p); err != nil {
		return p, err
	}
	p.loop = partition.New(engine, st, p.intake, partition.Options{
		MaxBatch: d.o.maxBatch, Committed: func(position uint64) { d.committed(p, position) },
		Full:  func(ctx context.Context, err error) error { return d.full(ctx, p, err) },
		Ahead: p.intake.Ahead,
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
func (d *daemon) openIntake(ctx context.Context, p *part) error {
	now := d.o.now
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

// do runs look on the engine between two messages.
func (p *part) do(ctx context.Context, look func(*monitor.Engine)) error {
	ctx, cancel := context.WithCancelCause(ctx)
	defer cancel(nil)
	defer context.AfterFunc(p.gone, func() { cancel(errMoving) })()
	if err := p.loop.Do(ctx, look); err != nil {
		return context.Cause(ctx)
	}
	return nil
}

// errMoving is returned for a partition that is being closed, here.
var errMoving = control.Errorf(codeElsewhere, "the partition is moving to another process: try again")

// close lets go of the partition, which must not run.
func (p *part) close() error {
	var errs []error
	p.leave()
	if p.intake != nil {
		errs = append(errs, p.intake.Close())
	}
	return errors.Join(append(errs, p.store.Close())...)
}
