package main

import (
	"context"
	"errors"
	"fmt"
	"time"

	"tailbell/ingest/claim"
)

// tenure is the time in which the process owns a partition, where several share
// them.
type tenure struct {
	claim   *claim.Holding
	ctx     context.Context //nolint:containedctx // of the tenure; its cause says why it ends
	lose    context.CancelCauseFunc
	taken   time.Time
	surplus chan struct{} // closed when the partition is to be handed over
	done    chan struct{} // closed when nothing is left of it here
}

func newTenure(ctx context.Context, c *claim.Holding) *tenure {
	t := &tenure{claim: c, taken: time.Now(), surplus: make(chan struct{}), done: make(chan struct{})}
	t.ctx, t.lose = context.WithCancelCause(ctx)
	return t
}

// errLost ends a tenure without a hand-over: another process is the owner.
var errLost = errors.New("another process owns the partition")

// openAgain is how long to wait before it is tried again to open a partition.
const openAgain = time.Second

// hold runs a partition for as long as it is owned. The one before on the same
// partition must have ended.
func (m *member) hold(t *tenure, n int, before *tenure) {
	defer close(t.done)
	defer t.lose(nil)
	if before != nil {
		<-before.done
	}
	began := time.Now()
	p := m.open(t, n)
	if p == nil {
		m.release(t, n)
		return
	}
	m.d.parts.put(p)
	p.taken, p.opened = t.taken, time.Now()
	m.d.startPart(t.ctx, p)
	m.d.log.Info().Int("partition", n).Uint64("epoch", t.claim.Epoch).Uint64("position", p.mu.position).Dur("took", time.Since(began)).Msg("the partition runs")
	copying, stopCopying := context.WithCancel(t.ctx)
	defer stopCopying()
	p.running.Go(func() { m.keepCopying(copying, p) })
	if n == frontPartition {
		p.running.Go(func() { m.keepSweeping(copying) })
	}
	stale := false
	select {
	case <-t.ctx.Done():
	case <-t.surplus:
		m.copyUp(t.ctx, p) // while it runs: little is left to read for the next owner
	case <-p.stale:
		stale = true
		m.d.log.Warn().Int("partition", n).Msg("another process has published for the partition: it is given up")
	}
	stopCopying()
	p.stop()
	p.running.Wait()
	if lost := errors.Is(context.Cause(t.ctx), errLost); !lost && !stale {
		m.d.flush([]*part{p})
		m.sayGoodbye(t, p)
	}
	m.release(t, n)
	m.d.parts.remove(n)
	if err := p.close(); err != nil {
		m.d.log.Error().Err(err).Int("partition", n).Msg("closing the partition")
	}
}

// open opens the partition, as often as the bus lets it fail. It returns nil if
// it is not to be opened any more.
func (m *member) open(t *tenure, n int) *part {
	for {
		p, err := m.d.openPart(t.ctx, n, t.claim)
		switch {
		case err == nil:
			return p
		case t.ctx.Err() != nil:
			return nil
		case errors.Is(err, claim.ErrStale):
			m.d.log.Warn().Err(err).Int("partition", n).Msg("opening the partition")
			return nil
		case !passingBus(err):
			m.d.fail(fmt.Errorf("partition %d: %w", n, err))
			return nil
		}
		m.d.log.Warn().Err(err).Int("partition", n).Msg("opening the partition: it is tried again")
		select {
		case <-time.After(openAgain):
		case <-t.surplus:
			return nil
		case <-t.ctx.Done():
			return nil
		}
	}
}

// release gives the partition up on the bus, unless it is lost anyway.
func (m *member) release(t *tenure, n int) {
	if errors.Is(context.Cause(t.ctx), errLost) {
		return
	}
	ctx, cancel := context.WithTimeout(context.Background(), goodbye)
	defer cancel()
	if err := m.keeper.Release(ctx, n); err != nil {
		m.d.log.Warn().Err(err).Int("partition", n).Msg("releasing the claim: another process waits until it has run out")
		return
	}
	m.d.log.Info().Int("partition", n).Msg("the partition is handed over")
}

// endTime is how long a process that ends goes on copying.
const endTime = 10 * time.Second

// sayGoodbye puts a last copy on the bus if the whole process ends: nobody may
// be there to read the stream on for long.
func (m *member) sayGoodbye(t *tenure, p *part) {
	if t.ctx.Err() == nil {
		return
	}
	ctx, cancel := context.WithTimeout(context.Background(), endTime)
	defer cancel()
	m.copyUp(ctx, p)
}
