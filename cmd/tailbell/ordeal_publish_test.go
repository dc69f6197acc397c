package main

import (
	"context"
	"errors"
	"fmt"
	"math/rand/v2"
	"slices"
	"strconv"
	"sync"
	"testing"
	"time"

	"github.com/nats-io/nats.go"
	"github.com/nats-io/nats.go/jetstream"

	"tailbell/ingest/wire"
	"tailbell/monitor/rehearse/ordeal"
)

// numberHeader says which message of the plan this is.
const numberHeader = "Ordeal-Number"

// publisher sends a plan in order, in windows, and again from the first message
// whose acknowledgement is missing. It keeps its own ledger: what was
// acknowledged, and at which position.
type publisher struct {
	t      *testing.T
	plan   *ordeal.Plan
	visit  func() (*nats.Conn, error)
	random *rand.Rand
	// careful gives every message an id by which the bus drops repeats;
	// otherwise only those that must not be stored twice have one.
	careful bool
	// most is how many messages are on their way at once.
	most int

	mu struct {
		sync.Mutex
		todo      []int // what is left to send, in order
		budget    int   // how much of it may be sent now
		positions map[int]uint64
		again     int // messages sent again
		breaks    int // connections lost
	}
	idle chan struct{} // one token while nothing is under way
}

func newPublisher(t *testing.T, plan *ordeal.Plan, seed uint64, visit func() (*nats.Conn, error)) *publisher {
	t.Helper()
	p := &publisher{t: t, plan: plan, visit: visit, random: rand.New(rand.NewPCG(seed, 2)), most: 30, idle: make(chan struct{}, 1)}
	p.mu.positions = map[int]uint64{}
	for i := range plan.Messages {
		p.mu.todo = append(p.mu.todo, i)
	}
	return p
}

// next returns the messages that may be sent now, at most n, up to the next
// setting.
func (p *publisher) next(n int) []int {
	p.mu.Lock()
	defer p.mu.Unlock()
	n = min(n, p.mu.budget, len(p.mu.todo))
	for i := range n {
		if p.plan.Messages[p.mu.todo[i]].Kind == ordeal.Setting {
			n = i
			break
		}
	}
	return slices.Clone(p.mu.todo[:n])
}

// grant lets so many more messages be sent.
func (p *publisher) grant(n int) {
	p.mu.Lock()
	defer p.mu.Unlock()
	p.mu.budget += n
}

// setting returns the set-up that is to be announced next, if that is what
// comes next.
func (p *publisher) setting() (number int, next bool) {
	p.mu.Lock()
	defer p.mu.Unlock()
	if len(p.mu.todo) == 0 || p.plan.Messages[p.mu.todo[0]].Kind != ordeal.Setting {
		return 0, false
	}
	return p.plan.Messages[p.mu.todo[0]].Setup, true
}

// announced takes the setting off the list.
func (p *publisher) announced() {
	p.mu.Lock()
	defer p.mu.Unlock()
	p.mu.todo = p.mu.todo[1:]
}

func (p *publisher) left() int {
	p.mu.Lock()
	defer p.mu.Unlock()
	return len(p.mu.todo)
}

// waiting reports whether nothing may be sent now.
func (p *publisher) waiting() bool { return len(p.next(1)) == 0 }

// run sends until ctx ends.
func (p *publisher) run(ctx context.Context) {
	var nc *nats.Conn
	defer func() {
		if nc != nil {
			nc.Close()
		}
	}()
	for ctx.Err() == nil {
		window := p.next(1 + p.random.IntN(p.most))
		if len(window) == 0 {
			idle(2 * time.Millisecond)
			continue
		}
		if nc == nil || nc.IsClosed() {
			var err error
			if nc, err = p.visit(); err != nil {
				idle(3 * time.Millisecond)
				continue
			}
		}
		acked, err := p.send(ctx, nc, window)
		p.took(window, acked)
		if err != nil {
			nc.Close()
			nc = nil
			p.mu.Lock()
			p.mu.breaks++
			p.mu.Unlock()
		}
	}
}

func (p *publisher) took(window []int, acked []uint64) {
	p.mu.Lock()
	defer p.mu.Unlock()
	for i, position := range acked {
		p.mu.positions[window[i]] = position
	}
	p.mu.todo = p.mu.todo[len(acked):]
	p.mu.budget -= len(acked)
	p.mu.again += len(window) - len(acked)
}

// send sends a window and returns the positions of the messages that were
// acknowledged, from the first on without a gap.
func (p *publisher) send(ctx context.Context, nc *nats.Conn, window []int) (positions []uint64, err error) {
	ctx, cancel := context.WithTimeout(ctx, 3*time.Second)
	defer cancel()
	js, err := jetstream.New(nc)
	if err != nil {
		return nil, err
	}
	var acks []jetstream.PubAckFuture
	for _, n := range window {
		ack, err := js.PublishMsgAsync(p.message(n), jetstream.WithRetryAttempts(0))
		if err != nil {
			break
		}
		acks = append(acks, ack)
	}
	for _, ack := range acks {
		select {
		case one := <-ack.Ok():
			positions = append(positions, one.Sequence)
		case err := <-ack.Err():
			return positions, err
		case <-ctx.Done():
			return positions, ctx.Err()
		}
	}
	if len(positions) < len(window) {
		return positions, errors.New("not all could be sent")
	}
	return positions, nil
}

func (p *publisher) message(n int) *nats.Msg {
	m := &p.plan.Messages[n]
	msg := nats.NewMsg(fmt.Sprintf("ordeal.in.%d.%s", m.Partition, ordealKinds[m.Kind]))
	msg.Data = m.Data
	if m.Kind == ordeal.Tick {
		msg.Header.Set(wire.TimeHeader, m.Time().Format(time.RFC3339))
	}
	msg.Header.Set(numberHeader, strconv.Itoa(n))
	if p.careful || m.Kind == ordeal.Act || !m.Repeatable {
		msg.Header.Set(jetstream.MsgIDHeader, "ordeal-"+strconv.Itoa(n))
	}
	return msg
}

// lost puts back what was acknowledged and is to be sent again, in order.
func (p *publisher) lost(is func(n int, position uint64) bool) (count int) {
	p.mu.Lock()
	defer p.mu.Unlock()
	var back []int
	for n, position := range p.mu.positions {
		if is(n, position) {
			back = append(back, n)
			delete(p.mu.positions, n)
		}
	}
	slices.Sort(back)
	p.mu.todo = append(back, p.mu.todo...)
	return len(back)
}

// forget forgets the positions beyond an end that the stream lost: what stands
// there from now on is something else.
func (p *publisher) forget(end uint64) {
	p.mu.Lock()
	defer p.mu.Unlock()
	for n, position := range p.mu.positions {
		if position > end {
			delete(p.mu.positions, n)
		}
	}
}

// streamEnd is the last position of the input stream.
func streamEnd(t *testing.T, nc *nats.Conn) uint64 {
	t.Helper()
	js, err := jetstream.New(nc)
	if err != nil {
		t.Fatal(err)
	}
	s, err := js.Stream(t.Context(), "ordeal-in")
	if err != nil {
		t.Fatal(err)
	}
	return s.CachedInfo().State.LastSeq
}
