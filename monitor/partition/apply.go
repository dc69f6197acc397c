package partition

import (
	"context"
	"errors"

	"tailbell/monitor"
	"tailbell/monitor/store"
)

// applier is the applying stage with what it has in hand.
type applier struct {
	*Loop
	batch Batch
	next  int // the first message of the batch that is not applied
	// mark is that of the last message applied. waiting is how many were that are
	// not yet handed on, and taken how many besides that were found ahead.
	mark           func() store.Mark
	waiting, taken int
	// asked says that the engine knows that the next message waits: it has gone as
	// far towards it as it may, which is to be committed, too.
	asked bool
	// carried says that the last message applied was carried over by a division: such
	// may wait in live time, too.
	carried bool
	// said is what was last told of where it stands.
	said Stand
	// lookout reads ahead, nil while nobody does, and found is what it brought.
	lookout *lookout
	found   []monitor.Message
}

// apply feeds the engine, and the committing stage whenever it is free.
func (l *Loop) apply(ctx context.Context, fail func(error)) {
	a := &applier{Loop: l}
	defer func() { a.lookout.end() }()
	committer := l.free
	for {
		batches, free, found := l.batches, committer, (<-chan []monitor.Message)(nil)
		if a.waits() {
			batches, found = nil, a.lookAhead(ctx, fail)
		}
		if a.waiting+a.taken >= l.opts.MaxBatch {
			batches, found = nil, nil
		}
		if !a.ready() && (!a.waits() || a.stand() == a.said) {
			free = nil
		}
		select {
		case _, open := <-free:
			if !open {
				committer = nil // it failed; ctx is about to end
				continue
			}
			if a.ready() {
				a.handOn()
			} else {
				a.free <- struct{}{}
				a.moved(a.stand())
			}
			a.said = a.stand()
		case b := <-batches:
			a.take(b)
		case messages := <-found:
			a.found = messages
			a.advance()
		case look := <-l.asks:
			look(l.engine)
		case <-ctx.Done():
			a.finish()
			return
		}
	}
}

// finish takes what was read before the source failed, and hands on what was
// applied.
func (a *applier) finish() {
	if !a.waits() {
		select {
		case b := <-a.batches:
			a.take(b)
		default:
		}
	}
	if _, open := <-a.free; open && a.waiting+a.taken > 0 {
		a.handOn()
	}
}

func (a *applier) take(b Batch) {
	a.batch, a.next = b, 0
	a.advance()
}

// ready reports whether something is to be handed on. What was only taken from ahead
// can wait until the message in hand goes on, unless others are to hear of it.
func (a *applier) ready() bool {
	if a.waits() && a.waiting == 0 {
		return a.taken > 0 && (a.engine.Tells() || a.taken >= a.opts.MaxBatch)
	}
	return a.waiting+a.taken > 0
}

// waits reports whether a message in hand must wait for other partitions.
func (a *applier) waits() bool { return a.next < len(a.batch.Messages) }

// advance applies the messages in hand, as far as they may be, with what was
// found ahead and no more of that than is needed.
func (a *applier) advance() {
	first := a.next
	for a.waits() {
		m := &a.batch.Messages[a.next]
		if !a.engine.Holds(m) {
			a.engine.Apply(m)
			a.next++
			a.waiting++
			a.asked, a.carried = false, m.Carried
			continue
		}
		if !a.asked {
			a.asked = true
			a.taken++
		}
		if !a.takeFound() {
			break
		}
	}
	if a.next > first {
		mark, last := a.batch.Mark, a.next-1
		a.mark = func() store.Mark { return mark(last) }
	}
}

// takeFound applies the next summary that was found ahead and is not known, and
// reports whether there was one. What can't be understood is refused in its turn.
func (a *applier) takeFound() bool {
	for len(a.found) > 0 {
		m := &a.found[0]
		a.found = a.found[1:]
		if m.Kind == monitor.SummaryMessage && m.Position > a.engine.Position() && m.Position > a.engine.Ahead() {
			a.engine.ApplyAhead(m)
			a.taken++
			a.asked = false
			return true
		}
	}
	return false
}

func (a *applier) stand() Stand {
	return Stand{Position: a.engine.Position(), Ahead: a.engine.Ahead(), Waits: a.waits()}
}

func (a *applier) handOn() {
	a.noteDue()
	c := commit{changes: a.engine.Drain(), stand: a.stand()}
	if c.changes.Position > 0 && a.mark != nil {
		c.mark = a.mark()
	}
	a.commits <- c
	a.waiting, a.taken, a.mark = 0, 0, nil
	if !a.waits() && !a.engine.InHistory() && !a.carried {
		a.lookout.end()
		a.lookout, a.found = nil, nil
	}
}

// errNoAhead is of a loop that can't look for what a message waits for.
var errNoAhead = errors.New("a message waits for what other partitions tell, and nothing here reads that")
