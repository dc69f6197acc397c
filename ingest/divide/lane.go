package divide

import (
	"context"
	"errors"
	"fmt"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/wire"
	"tailbell/monitor"
)

const (
	readMessages = 4096
	readBytes    = 16 << 20
	// forgetEvery is how many messages of history an engine takes before what
	// it found is dropped.
	forgetEvery = 4096
)

// lane reads one old partition up to its end.
type lane struct {
	number int
	source *bus.Source
	end    uint64
	raws   []bus.Raw

	decoder *wire.Decoder
	clock   monitor.Instant
	// engine tells how the clock moves in history time, where that depends on
	// what is monitored; nil once the partition is live.
	engine *monitor.Engine
	steps  uint64 // given to the engine

	pieces []piece // of the message in hand, not yet carried over
}

// piece is a message, or those of its elements that moved the clock to the same
// moment.
type piece struct {
	lane    *lane
	clock   monitor.Instant // the partition's, after it
	history bool
	raw     *bus.Raw
	message monitor.Message
	part    bool // other elements of the message stand in other pieces
}

func openLane(ctx context.Context, b *bus.Bus, setup *config.Setup, number int) (*lane, error) {
	end, err := b.EndOf(ctx, number)
	if err != nil {
		return nil, err
	}
	source, err := b.Source(ctx, number, 0)
	if err != nil {
		return nil, err
	}
	l := &lane{
		number: number, source: source, end: end, decoder: decoderOf(setup), clock: monitor.Beginning,
		engine: monitor.New(monitor.Partition{Number: number, Of: setup.Partitions, KeyParts: setup.KeyParts}),
	}
	l.engine.Pass()
	return l, nil
}

func decoderOf(setup *config.Setup) *wire.Decoder {
	return wire.NewDecoder(wire.Limits{MessageBytes: setup.Limits.MaxMessageBytes, Observations: setup.Limits.MaxObservations})
}

func (l *lane) close() error { return l.source.Close() }

// peek returns the next piece, nil at the end.
func (l *lane) peek(ctx context.Context) (*piece, error) {
	for len(l.pieces) == 0 {
		if len(l.raws) == 0 {
			if l.source.Position() >= l.end {
				return nil, nil
			}
			var err error
			if l.raws, err = l.source.Next(ctx, nil, readMessages, readBytes); err != nil {
				return nil, fmt.Errorf("partition %d: %w", l.number, err)
			}
			if m := l.source.Missing(); m.Messages > 0 {
				return nil, fmt.Errorf("partition %d: %w: positions %d to %d are missing", l.number, bus.ErrTrimmed, m.From, m.To)
			}
		}
		raw := l.raws[0]
		l.raws = l.raws[1:]
		if raw.Position > l.end {
			return nil, errors.New("messages arrived while the stream was being divided: its account must not let others publish")
		}
		l.take(&raw)
	}
	return &l.pieces[0], nil
}

// take cuts a message into pieces.
func (l *lane) take(raw *bus.Raw) {
	m := l.decoder.Decode(wire.Raw(*raw))
	if l.engine == nil || m.Kind == monitor.Live {
		l.engine = nil
		l.clock = max(l.clock, m.Stored)
		l.pieces = append(l.pieces[:0], piece{lane: l, clock: l.clock, raw: raw, message: m})
		return
	}
	l.pieces = l.pieces[:0]
	if m.Kind != monitor.Observations {
		l.apply(m)
		l.pieces = append(l.pieces, piece{lane: l, clock: l.clock, history: true, raw: raw, message: m})
		return
	}
	first := 0
	for i := range m.Items {
		before := l.clock
		one := m
		one.Items = m.Items[i : i+1]
		l.apply(one)
		if i > 0 && l.clock != before {
			l.cut(raw, &m, first, i, before)
			first = i
		}
	}
	l.cut(raw, &m, first, len(m.Items), l.clock)
}

// cut makes a piece of a message's elements from one to another.
func (l *lane) cut(raw *bus.Raw, m *monitor.Message, from, to int, clock monitor.Instant) {
	p := piece{lane: l, clock: clock, history: true, raw: raw, message: *m, part: to-from < len(m.Items)}
	p.message.Items = m.Items[from:to]
	l.pieces = append(l.pieces, p)
}

// apply moves the clock of history time.
func (l *lane) apply(m monitor.Message) {
	l.steps++
	m.Position = l.steps
	l.engine.Apply(&m)
	l.clock = l.engine.Clock()
	if l.steps%forgetEvery == 0 {
		l.engine.Findings()
	}
}

// next returns the piece that peek showed, and goes on.
func (l *lane) next() piece {
	p := l.pieces[0]
	l.pieces = l.pieces[1:]
	return p
}
