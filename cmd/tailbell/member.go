package main

import (
	"context"
	"crypto/rand"
	"encoding/hex"
	"errors"
	"fmt"
	"io/fs"
	"maps"
	"os"
	"path/filepath"
	"strings"
	"sync"
	"time"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/claim"
	"tailbell/ingest/control"
	"tailbell/monitor/store"
)

// member is this process among those that may work on one bus: what it owns, and
// what it does as that comes and goes.
type member struct {
	d       *daemon
	keeper  *claim.Keeper
	keeping sync.WaitGroup
	stop    context.CancelFunc
	failed  chan error      // the keeper gave up
	told    chan struct{}   // there are events
	shelf   *bus.Objects    // of the copies, where processes share the partitions
	copying chan struct{}   // taken while a copy goes up
	serve   *control.Server // of what the others ask, nil for none

	mu struct {
		sync.Mutex
		events []claim.Event
		epochs []uint64 // of the stores in the folder, 0 for none
		warned time.Time
	}
	tenures map[int]*tenure // of run's goroutine alone
	all     sync.WaitGroup
}

// openMember begins to keep claims.
func openMember(ctx context.Context, d *daemon) (*member, error) {
	bucket, err := d.bus.Claims(ctx)
	if err != nil {
		return nil, err
	}
	folder, err := folderName(d.setup.Folder)
	if err != nil {
		return nil, err
	}
	m := &member{d: d, copying: make(chan struct{}, 1), failed: make(chan error, 1), told: make(chan struct{}, 1), tenures: map[int]*tenure{}}
	if err := m.readEpochs(); err != nil {
		return nil, err
	}
	if d.setup.Bus.Share {
		if m.shelf, err = d.bus.Copies(ctx); err != nil {
			return nil, err
		}
	}
	span := d.setup.Bus.Claim
	if span == 0 {
		span = config.DefaultClaim
	}
	began := time.Now()
	m.keeper = claim.NewKeeper(claim.Options{
		Board: bucket, Folder: folder, Start: randomName(), Digest: d.setup.Digest, Partitions: d.setup.Partitions,
		Span: span, Alone: !d.setup.Bus.Share, Now: func() time.Duration { return time.Since(began) },
		Local: m.localEpoch, Marks: m.marks, Tell: m.tell,
	})
	d.log.Info().Str("member", m.keeper.Name()).Bool("share", d.setup.Bus.Share).Msg("keeping claims")
	if d.setup.Bus.Share && d.setup.Bus.Replicas < 3 {
		d.log.Warn().Int("replicas", d.setup.Bus.Replicas).Msg("processes share the partitions, but the streams have fewer than 3 replicas: the bus itself may be the one thing that fails")
	}
	keep, stop := context.WithCancel(context.WithoutCancel(ctx))
	m.stop = stop
	m.keeping.Go(func() {
		if err := m.keeper.Run(keep, m.warn); err != nil {
			m.failed <- err
		}
	})
	return m, nil
}

// folderName names the folder among those of all members; the name is kept in it.
func folderName(folder string) (string, error) {
	path := filepath.Join(folder, "member")
	text, err := os.ReadFile(path)
	if errors.Is(err, fs.ErrNotExist) {
		name := randomName()
		return name, os.WriteFile(path, []byte(name+"\n"), 0o600)
	}
	if err != nil {
		return "", err
	}
	name := strings.TrimSpace(string(text))
	if raw, err := hex.DecodeString(name); err != nil || len(raw) != nameBytes {
		return "", fmt.Errorf("%s does not hold the name of this folder: remove it, and another one is made", path)
	}
	return name, nil
}

const nameBytes = 4

func randomName() string {
	var raw [nameBytes]byte
	rand.Read(raw[:]) // never fails, see crypto/rand
	return hex.EncodeToString(raw[:])
}

// readEpochs reads which stores lie in the folder, before any is opened.
func (m *member) readEpochs() error {
	m.mu.epochs = make([]uint64, m.d.setup.Partitions)
	for n := range m.mu.epochs {
		st, err := store.OpenReadOnly(storePath(m.d.setup, n), store.Options{})
		if errors.Is(err, fs.ErrNotExist) {
			continue
		}
		if err != nil {
			return err
		}
		if st.Identity() == identityOf(m.d.setup, n) {
			m.mu.epochs[n], err = st.Epoch()
		}
		if err := errors.Join(err, st.Close()); err != nil {
			return err
		}
	}
	return nil
}

// localEpoch is the epoch of the store of a partition that lies in the folder, 0
// for none.
func (m *member) localEpoch(n int) uint64 {
	m.mu.Lock()
	defer m.mu.Unlock()
	return m.mu.epochs[n]
}

func (m *member) noteEpoch(n int, epoch uint64) {
	m.mu.Lock()
	defer m.mu.Unlock()
	m.mu.epochs[n] = epoch
}

// marks say how far a partition has come that is open here.
func (m *member) marks(n int) (claim.Marks, bool) {
	p := m.d.parts.get(n)
	if p == nil {
		return claim.Marks{}, false
	}
	outlets, err := p.store.OutletState()
	if err != nil {
		return claim.Marks{}, false
	}
	p.mu.Lock()
	marks := claim.Marks{Position: p.mu.position, Origin: p.origin, Told: maps.Clone(p.told)}
	p.mu.Unlock()
	if marks.Told == nil {
		marks.Told = map[string]uint64{}
	}
	for _, o := range outlets {
		// A store that is still being filled again has fewer rows than were told.
		marks.Told[o.Name] = max(marks.Told[o.Name], o.Through)
	}
	return marks, true
}

// errNotHeld puts off what only the owner may do.
var errNotHeld = errors.New("the claim on the partition has run out: it waits until it is renewed, or another process does it")

// may says whether the process may act for a partition at this moment.
func (m *member) may(n int) error {
	if m.keeper.Holds(n) {
		return nil
	}
	return errNotHeld
}

func (m *member) tell(e claim.Event) {
	m.mu.Lock()
	m.mu.events = append(m.mu.events, e)
	m.mu.Unlock()
	select {
	case m.told <- struct{}{}:
	default:
	}
}

func (m *member) events() []claim.Event {
	m.mu.Lock()
	defer m.mu.Unlock()
	events := m.mu.events
	m.mu.events = nil
	return events
}

// warnAgain is how often it is said that claims can't be kept.
const warnAgain = 10 * time.Second

func (m *member) warn(err error) {
	m.mu.Lock()
	defer m.mu.Unlock()
	if now := time.Now(); now.Sub(m.mu.warned) >= warnAgain {
		m.mu.warned = now
		m.d.log.Warn().Err(err).Msg("keeping claims")
	}
}

// takeAll waits until every partition is this process's own.
func (m *member) takeAll(ctx context.Context) ([]*claim.Holding, error) {
	won := make([]*claim.Holding, m.d.setup.Partitions)
	for missing := len(won); missing > 0; {
		select {
		case err := <-m.failed:
			return nil, err
		case <-ctx.Done():
			return nil, ctx.Err()
		case <-m.told:
		}
		for _, e := range m.events() {
			if e.Kind == claim.Waiting {
				continue // what ends it is told by failed
			}
			if e.Kind != claim.Won {
				return nil, fmt.Errorf("partition %d: %s", e.Partition, e.Why)
			}
			won[e.Partition] = &e.Claim
			missing--
		}
	}
	return won, nil
}

// run does what the claims ask for until ctx ends, and then hands over what is
// owned.
func (m *member) run(ctx context.Context) error {
	done := make(chan struct{})
	ending := ctx.Done()
	for {
		select {
		case err := <-m.failed:
			m.d.fail(err)
		case <-m.told:
			for _, e := range m.events() {
				if err := m.take(ctx, &e); err != nil {
					m.d.fail(err)
				}
			}
		case <-ending:
			ending = nil
			m.leave()
			go func() {
				m.all.Wait()
				close(done)
			}()
		case <-done:
			return nil
		}
	}
}

// goodbye is how long the bus is asked to note that the process goes.
const goodbye = 2 * time.Second

func (m *member) leave() {
	ctx, cancel := context.WithTimeout(context.Background(), goodbye)
	defer cancel()
	if err := m.keeper.Leave(ctx); err != nil {
		m.d.log.Warn().Err(err).Msg("leaving")
	}
}

// take does what one event asks for. A process that works alone can't go on
// without one of its partitions.
func (m *member) take(ctx context.Context, e *claim.Event) error {
	if e.Kind == claim.Waiting {
		m.d.log.Warn().Str("why", e.Why).Msg("this process takes no part for now")
		return nil
	}
	log := m.d.log.Info().Int("partition", e.Partition)
	t := m.tenures[e.Partition]
	switch e.Kind { //nolint:exhaustive // waiting is of no partition
	case claim.Renewed:
		log.Msg("the claim had run out, and is renewed")
		if p := m.d.parts.get(e.Partition); p != nil {
			for _, q := range p.queues {
				q.Again()
			}
		}
	case claim.Lost:
		log.Str("why", e.Why).Msg("the partition is lost")
		if !m.d.setup.Bus.Share {
			return fmt.Errorf("partition %d: %w: %s", e.Partition, claim.ErrOwned, e.Why)
		}
		t.lose(errLost)
	case claim.Surplus:
		log.Msg("another process is to have the partition")
		close(t.surplus)
	case claim.Won:
		log.Uint64("epoch", e.Claim.Epoch).Msg("the partition is this process's")
		next := newTenure(ctx, &e.Claim)
		m.tenures[e.Partition] = next
		m.all.Go(func() { m.hold(next, e.Partition, t) })
	}
	return nil
}

// close ends the keeping of claims. What is still owned is released.
func (m *member) close() error {
	ctx, cancel := context.WithTimeout(context.Background(), goodbye)
	defer cancel()
	for n := range m.d.setup.Partitions {
		if err := m.keeper.Release(ctx, n); err != nil {
			m.d.log.Warn().Err(err).Int("partition", n).Msg("releasing the claim: another process waits until it has run out")
			break
		}
	}
	m.stop()
	m.keeping.Wait()
	return nil
}

// passingBus reports whether an error of opening a partition is the bus's and
// may pass.
func passingBus(err error) bool {
	return bus.Passing(err) || errors.Is(err, claim.ErrConflict) || errors.Is(err, context.DeadlineExceeded)
}
