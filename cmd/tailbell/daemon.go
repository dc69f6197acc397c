package main

import (
	"context"
	"errors"
	"fmt"
	"sync"
	"time"

	"github.com/rs/zerolog"

	"tailbell/alert/outlet"
	"tailbell/alert/page"
	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/claim"
	"tailbell/ingest/control"
	"tailbell/monitor/life"
)

// daemon is everything that run and demo keep running: the bus, and for each
// partition its store, engine and loop with the outlets behind.
type daemon struct {
	floor []byte // see heapFloor
	setup *config.Setup
	bus   *bus.Bus
	log   zerolog.Logger
	o     daemonOptions
	parts partSet
	// member is nil for an embedded bus, which no other process works on.
	member *member
	serve  *control.Server
	page   *page.Page // nil for none
	// fail ends run with an error.
	fail context.CancelCauseFunc

	troubles troubles
	copies   copyJobs
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

// openDaemon opens the bus and recovers every partition, unless other processes
// share them: then run does when it is their owner. What fails is closed again.
func openDaemon(ctx context.Context, setup *config.Setup, o daemonOptions) (d *daemon, err error) {
	if err := checkFolder(setup); err != nil {
		return nil, err
	}
	d = &daemon{setup: setup, log: o.log, o: o, floor: heapFloor(), parts: partSet{of: make([]*part, setup.Partitions)}}
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
	if !b.Embedded() {
		if d.member, err = openMember(ctx, d); err != nil {
			return d, err
		}
	}
	if !setup.Bus.Share {
		if err := d.openParts(ctx); err != nil {
			return d, err
		}
	}
	return d, d.answer(ctx)
}

// answer begins to answer commands.
func (d *daemon) answer(ctx context.Context) (err error) {
	if !d.setup.Bus.Share {
		d.serve, err = control.Serve(ctx, d.bus, d.verbs())
		return err
	}
	if d.member.serve, err = control.ServeMember(ctx, d.bus, d.member.keeper.Name(), d.memberVerbs()); err != nil {
		return err
	}
	d.serve, err = control.ServeShared(ctx, d.bus, (&front{d}).verbs(), func() bool { return d.member.keeper.Holds(frontPartition) })
	return err
}

// openParts opens every partition, which on a bus of somebody else's must be the
// process's own.
func (d *daemon) openParts(ctx context.Context) error {
	won := make([]*claim.Holding, d.setup.Partitions)
	if d.member != nil {
		var err error
		if won, err = d.member.takeAll(ctx); err != nil {
			return err
		}
	}
	for n, c := range won {
		p, err := d.openPart(ctx, n, c)
		if err != nil {
			return fmt.Errorf("partition %d: %w", n, err)
		}
		d.parts.put(p)
	}
	return nil
}

// run runs the partitions until ctx ends or something fails, then delivers what
// waits in the outlets.
func (d *daemon) run(ctx context.Context) error {
	ctx, d.fail = context.WithCancelCause(ctx)
	defer d.fail(nil)
	var running sync.WaitGroup
	start := func(f func(context.Context) error) {
		running.Go(func() {
			if err := f(ctx); err != nil {
				d.fail(err)
			}
		})
	}
	for _, p := range d.parts.all() {
		d.startPart(ctx, p)
	}
	if d.member != nil {
		start(d.member.run)
	}
	start(d.watchRoom)
	if d.page != nil && d.setup.Bus.Share {
		start(d.tellNews)
	}
	<-ctx.Done()
	for _, p := range d.parts.all() {
		p.running.Wait()
	}
	running.Wait()
	if err := context.Cause(ctx); err != nil && !errors.Is(err, context.Canceled) {
		return err
	}
	d.flush(d.parts.all())
	return nil
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
	if d.member != nil && d.member.serve != nil {
		errs = append(errs, d.member.serve.Close())
	}
	d.copies.all.Wait()
	if d.member != nil {
		errs = append(errs, d.member.close())
	}
	for _, p := range d.parts.all() {
		errs = append(errs, p.close())
	}
	return errors.Join(append(errs, d.bus.Close())...)
}
