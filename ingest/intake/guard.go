package intake

import (
	"context"
	"fmt"
	"sync"
	"time"

	"tailbell/ingest/bus"
	"tailbell/monitor"
)

// leap is how far the bus's clock may leap ahead, both of the message before
// and of the local clock.
const leap = time.Hour

// recheck is how often the local clock is looked at while the intake is held:
// it may be set.
const recheck = time.Minute

// Hold is a message at which the intake stands still, because the bus stored it
// too far in the future.
type Hold struct {
	Position uint64          `json:"position"`
	Stored   monitor.Instant `json:"stored"`
	// Before is when the message before it was stored (monitor.Beginning if
	// there was none), Local the local time when it was found.
	Before monitor.Instant `json:"before"`
	Local  monitor.Instant `json:"local"`
}

// String says it in words.
func (h *Hold) String() string {
	const layout = "2006-01-02 15:04:05Z"
	before := "nothing came before it"
	if h.Before != monitor.Beginning {
		before = "the one before it at " + h.Before.Time().Format(layout)
	}
	return fmt.Sprintf("the bus stored the message at position %d at %s, %s; the local clock stood at %s",
		h.Position, h.Stored.Time().Format(layout), before, h.Local.Time().Format(layout))
}

// guard holds messages whose times leap ahead.
type guard struct {
	last monitor.Instant // of the messages that passed
	now  func() time.Time
	tell func(*Hold)

	mu struct {
		sync.Mutex
		hold     *Hold
		accepted chan struct{} // closed when a person accepts the hold
	}
}

func newGuard(last monitor.Instant, now func() time.Time, tell func(*Hold)) *guard {
	return &guard{last: last, now: now, tell: tell}
}

// pass returns how many of the messages, at least one, may go on. It waits as
// long as the first may not.
func (g *guard) pass(ctx context.Context, raw []bus.Raw) (int, error) {
	for i := range raw {
		stored := monitor.InstantOf(raw[i].Stored)
		if g.leaps(stored) {
			if i > 0 {
				return i, nil
			}
			if err := g.wait(ctx, raw[i].Position, stored); err != nil {
				return 0, err
			}
		}
		g.last = max(g.last, stored)
	}
	return len(raw), nil
}

// leaps reports whether a message stored then is to be held. A silence of
// hours is no leap: then the local clock has got there as well.
func (g *guard) leaps(stored monitor.Instant) bool {
	if g.last != monitor.Beginning && stored <= g.last.Add(leap) {
		return false
	}
	return stored > monitor.InstantOf(g.now()).Add(leap)
}

// wait waits until the message may pass.
func (g *guard) wait(ctx context.Context, position uint64, stored monitor.Instant) error {
	accepted := make(chan struct{})
	h := &Hold{Position: position, Stored: stored, Before: g.last, Local: monitor.InstantOf(g.now())}
	g.set(h, accepted)
	g.tell(h)
	defer func() {
		g.set(nil, nil)
		g.tell(nil)
	}()
	for g.leaps(stored) {
		ahead := time.Duration(stored-monitor.InstantOf(g.now()).Add(leap)) * time.Microsecond
		timer := time.NewTimer(min(max(ahead, time.Millisecond), recheck))
		select {
		case <-timer.C:
		case <-accepted:
			timer.Stop()
			return nil
		case <-ctx.Done():
			timer.Stop()
			return ctx.Err()
		}
	}
	return nil
}

func (g *guard) set(h *Hold, accepted chan struct{}) {
	g.mu.Lock()
	defer g.mu.Unlock()
	g.mu.hold, g.mu.accepted = h, accepted
}

func (g *guard) held() *Hold {
	g.mu.Lock()
	defer g.mu.Unlock()
	return g.mu.hold
}

func (g *guard) accept(position uint64) bool {
	g.mu.Lock()
	defer g.mu.Unlock()
	if g.mu.hold == nil || g.mu.hold.Position != position {
		return false
	}
	close(g.mu.accepted)
	g.mu.hold = nil
	return true
}
