package main

import (
	"context"
	"errors"
	"fmt"
	"strings"
	"time"

	"tailbell/alert/words"
	"tailbell/ingest/bus"
)

const (
	// redialTime is how long a daemon that went away is waited for, redialPause
	// the time between attempts.
	redialTime  = time.Minute
	redialPause = 500 * time.Millisecond
	// awaitTime is how long the daemon may make no progress before feed stops
	// waiting for it, awaitPause the time between looks at it.
	awaitTime  = 30 * time.Second
	awaitPause = 100 * time.Millisecond
)

// now is the time of day; commands are where a clock may be read.
func now() time.Time { return time.Now() }

// errGone is the error of a daemon that went away and did not come back.
var errGone = errors.New("the daemon went away, and did not come back within a minute")

// redial connects to the daemon that has been started again.
func (f *feeding) redial(ctx context.Context) error {
	if err := say(f.stderr, "The daemon went away; waiting for it to come back."); err != nil {
		return err
	}
	closed := f.bus.Close()
	deadline := now().Add(redialTime)
	for {
		b, err := bus.Dial(ctx, f.setup)
		if err == nil {
			f.bus = b
			return say(f.stderr, "The daemon is back; going on.")
		}
		if now().After(deadline) {
			return errors.Join(errGone, err, closed)
		}
		if err := pause(ctx, redialPause); err != nil {
			return err
		}
	}
}

func pause(ctx context.Context, d time.Duration) error {
	select {
	case <-time.After(d):
		return nil
	case <-ctx.Done():
		return ctx.Err()
	}
}

// broken says how far a feeding came that broke off, and what to do.
func (f *feeding) broken(ctx context.Context, err error) error {
	if ctx.Err() != nil {
		err = errors.New("interrupted")
	}
	twice := "nothing is counted twice"
	if f.again {
		twice = "nothing is counted twice, except rows of indicators that keep no ids"
	}
	return fmt.Errorf("%w\nOf %s, %s stored for certain. Feed the same files again, with or without a daemon: %s",
		err, amount(len(f.h.Entries), "rows"), words.Whole(int64(f.done))+" "+areIs(f.done), twice)
}

// ask asks the daemon how it is.
func (f *feeding) ask(ctx context.Context, s *statusReply) error {
	ctx, cancel := context.WithTimeout(ctx, askTime)
	defer cancel()
	return callDaemon(ctx, f.setup, f.bus, verbStatus, nil, s)
}

// await waits until the daemon has read what was published, and says what
// became of it.
func (f *feeding) await(ctx context.Context) error {
	var s statusReply
	if err := f.ask(ctx, &s); err != nil {
		return f.unknown(ctx, err)
	}
	end := map[int]uint64{}
	moved, last := now(), uint64(0)
	for {
		// A partition may be on its way from one process to another: then it is in
		// no answer, and its end is taken later.
		behind, sum := uint64(0), uint64(0)
		for i := range s.Partitions {
			p := &s.Partitions[i]
			if _, known := end[p.Number]; !known {
				end[p.Number] = p.End
			}
			sum += p.Position
			behind += end[p.Number] - min(end[p.Number], p.Position)
		}
		if behind == 0 && len(s.Partitions) == f.setup.Partitions {
			return f.became(&s)
		}
		if sum != last {
			moved, last = now(), sum
		}
		if now().Sub(moved) > awaitTime {
			return f.unknown(ctx, fmt.Errorf("it has made no progress for %s%s", duration(awaitTime), s.waiting()))
		}
		if err := pause(ctx, awaitPause); err != nil {
			return f.unknown(ctx, err)
		}
		s = statusReply{}
		if err := f.ask(ctx, &s); err != nil {
			return f.unknown(ctx, err)
		}
	}
}

// waiting names the partitions that wait for others, nothing if none does.
func (s *statusReply) waiting() string {
	var all []string
	for i := range s.Partitions {
		if p := &s.Partitions[i]; p.History && len(p.WaitsFor) > 0 {
			all = append(all, fmt.Sprintf("partition %d waits for what %s %s", p.Number, partitionsNamed(p.WaitsFor), countVerb(p.WaitsFor)))
		}
	}
	if len(all) == 0 {
		return ""
	}
	return "; " + strings.Join(all, ", ") + ": in history time they go on together"
}

// unknown says that the rows are safe, though not read yet.
func (f *feeding) unknown(ctx context.Context, err error) error {
	if ctx.Err() != nil {
		err = errors.New("interrupted")
	}
	return fmt.Errorf("the rows are in the stream, but what the daemon makes of them is not known yet: %w\ntailbell status says how far it is", err)
}
