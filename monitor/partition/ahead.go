package partition

import (
	"context"

	"tailbell/monitor"
)

// Ahead reads the summaries in a partition's stream, in order, and nothing else.
type Ahead interface {
	// Next waits until there is at least one, then returns what is there, at most
	// limit.
	Next(ctx context.Context, limit int) ([]monitor.Message, error)
	Close() error
}

// aheadBatch is how many summaries are read ahead at once.
const aheadBatch = 100

// lookout is who reads ahead. It goes on where it stands when a later message
// must wait.
type lookout struct {
	found chan []monitor.Message
	stop  context.CancelFunc
	ended chan struct{}
}

// lookAhead returns what is read ahead, from where the engine has come on.
func (a *applier) lookAhead(ctx context.Context, fail func(error)) <-chan []monitor.Message {
	if a.lookout == nil {
		l := &lookout{found: make(chan []monitor.Message), ended: make(chan struct{})}
		ctx, l.stop = context.WithCancel(ctx)
		a.lookout = l
		after := max(a.engine.Position(), a.engine.Ahead())
		go func() {
			defer close(l.ended)
			if err := l.read(ctx, a.opts.Ahead, after); ctx.Err() == nil {
				fail(err)
			}
		}()
	}
	return a.lookout.found
}

// read reads until ctx ends or the source fails.
func (l *lookout) read(ctx context.Context, open func(context.Context, uint64) (Ahead, error), after uint64) (err error) {
	if open == nil {
		return errNoAhead
	}
	source, err := open(ctx, after)
	if err != nil {
		return err
	}
	defer func() {
		if closed := source.Close(); err == nil {
			err = closed
		}
	}()
	for {
		messages, err := source.Next(ctx, aheadBatch)
		if err != nil {
			return err
		}
		select {
		case l.found <- messages:
		case <-ctx.Done():
			return ctx.Err()
		}
	}
}

// end ends the reading, if there is any, and waits until it has.
func (l *lookout) end() {
	if l != nil {
		l.stop()
		<-l.ended
	}
}
