package claim

import (
	"context"
	"errors"
	"fmt"
	"sync"
	"time"

	"tailbell/ingest/bus"
)

// ErrStale is returned to an owner whom another one has followed: whatever it
// still publishes is refused.
var ErrStale = errors.New("another process owns this partition now")

// Log is the stream of alerts; a *bus.Bus is one.
type Log interface {
	LastPublished(ctx context.Context, partition int) (bus.Published, error)
	PublishOwned(ctx context.Context, m *bus.OwnerMessage) (position uint64, repeated bool, err error)
}

// Step is a step of an alert that is to be published; Row is 0 for a test, which
// is in no outbox.
type Step struct {
	Row                       uint64
	Key, Direction, Indicator string
	Event                     []byte
}

// Fence publishes the steps of one partition for one owner. Everything that it
// publishes must follow the last message of the partition that it knows of, so
// that from the mark of the next owner on nothing of this one is stored.
type Fence struct {
	log       Log
	partition int
	epoch     uint64
	origin    string
	// resume has rows that are in the stream already not published again.
	resume bool

	mu struct {
		sync.Mutex
		taken bool
		last  bus.Published
		stale error
	}
}

// NewFence returns the fence of an owner. origin names the input stream; rows of
// another one are not this one's. With resume, steps that are in the stream by
// their numbers are not published again; without, they are, and the bus knows
// their keys for a day.
func NewFence(log Log, partition int, epoch uint64, origin string, resume bool) *Fence {
	return &Fence{log: log, partition: partition, epoch: epoch, origin: origin, resume: resume}
}

// fenceTries bounds how often the last message is asked for anew at once: a
// replica of the bus may be a little behind.
const (
	fenceTries = 20
	fencePause = 50 * time.Millisecond
)

// Take puts the owner's mark, after which nothing of an earlier owner is stored.
// It is Publish's first step, too.
func (f *Fence) Take(ctx context.Context) error {
	f.mu.Lock()
	defer f.mu.Unlock()
	return f.take(ctx)
}

func (f *Fence) take(ctx context.Context) error {
	if f.mu.taken || f.mu.stale != nil {
		return f.mu.stale
	}
	return f.try(ctx, func() (bool, error) {
		last, err := f.log.LastPublished(ctx, f.partition)
		if err != nil {
			return false, err
		}
		if last.Epoch >= f.epoch {
			return f.see(last), f.mu.stale
		}
		mark := bus.OwnerMessage{Partition: f.partition, Published: bus.Published{Position: last.Position, Epoch: f.epoch, Origin: f.origin}}
		if last.Origin == f.origin {
			mark.Row, mark.Key = last.Row, last.Key
		}
		if mark.Position, _, err = f.log.PublishOwned(ctx, &mark); err != nil {
			return false, err
		}
		f.mu.taken = true
		f.mu.last = mark.Published
		return true, nil
	})
}

// see takes in what is last in the stream: the owner's own message, or that of
// another, who has followed.
func (f *Fence) see(last bus.Published) bool {
	if last.Epoch > f.epoch {
		f.mu.stale = fmt.Errorf("partition %d, epoch %d: %w: it has epoch %d", f.partition, f.epoch, ErrStale, last.Epoch)
		return false
	}
	f.mu.taken = true
	if last.Epoch == f.epoch {
		f.mu.last = last
	} else { // the own messages were removed from the stream: rows stay
		f.mu.last.Position = last.Position
	}
	return true
}

// Row is the number of the last step that is in the stream, 0 if that is not
// known, with its key, "" if that is not known.
func (f *Fence) Row() (uint64, string) {
	f.mu.Lock()
	defer f.mu.Unlock()
	return f.mu.last.Row, f.mu.last.Key
}

// Publish stores a step, unless it is in the stream. Steps come in the order of
// their rows. The error is an ErrStale, for ever, once another owner has
// followed.
func (f *Fence) Publish(ctx context.Context, s *Step) error {
	f.mu.Lock()
	defer f.mu.Unlock()
	if err := f.take(ctx); err != nil {
		return err
	}
	return f.try(ctx, func() (bool, error) {
		if f.resume && s.Row > 0 && s.Row <= f.mu.last.Row {
			return true, f.agrees(s)
		}
		m := bus.OwnerMessage{
			Partition: f.partition, ID: s.Key, Direction: s.Direction, Indicator: s.Indicator, Event: s.Event,
			Published: bus.Published{Position: f.mu.last.Position, Epoch: f.epoch, Row: f.mu.last.Row, Key: f.mu.last.Key, Origin: f.origin},
		}
		if s.Row > m.Row {
			m.Row, m.Key = s.Row, s.Key
		}
		position, repeated, err := f.log.PublishOwned(ctx, &m)
		if errors.Is(err, bus.ErrConflict) {
			last, lastErr := f.log.LastPublished(ctx, f.partition)
			if lastErr != nil {
				return false, lastErr
			}
			f.see(last)
			return false, errors.Join(f.mu.stale, err)
		}
		if err != nil {
			return false, err
		}
		if !repeated {
			f.mu.last = m.Published
			f.mu.last.Position = position
		}
		return true, nil
	})
}

// ErrApart is returned once for a step that is in the stream under its number, but
// as another one.
var ErrApart = errors.New("this store has come to other steps than the one before")

// agrees checks that a step is the one that the stream has last, where it is.
func (f *Fence) agrees(s *Step) error {
	key := f.mu.last.Key
	if s.Row != f.mu.last.Row || key == "" || key == s.Key {
		return nil
	}
	f.mu.last.Key = ""
	return fmt.Errorf("partition %d, step %d: %w: the stream of alerts has %s, this store %s", f.partition, s.Row, ErrApart, key, s.Key)
}

// try tries until it is done, the owner is stale, or the error is no conflict.
func (f *Fence) try(ctx context.Context, attempt func() (done bool, err error)) error {
	for n := 1; ; n++ {
		done, err := attempt()
		if done || f.mu.stale != nil || n == fenceTries || err != nil && !errors.Is(err, bus.ErrConflict) {
			if f.mu.stale != nil {
				return f.mu.stale
			}
			return err
		}
		timer := time.NewTimer(time.Duration(n-1) * fencePause)
		select {
		case <-timer.C:
		case <-ctx.Done():
			timer.Stop()
			return ctx.Err()
		}
	}
}
