package history

import (
	"context"
	"fmt"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/replay"
)

// Range says what part of a stream is read.
type Range struct {
	// Position is the first message, 0 for all; Time the earliest history time
	// or stored time, if HasTime.
	Position uint64
	Time     monitor.Instant
	HasTime  bool
}

// streamName is where the rows of a stream stand: their line is the position.
const streamName = "stream"

// ReadStream reads what the stream of the bus holds now onto the tape of the
// options, at the times at which it became known: history time while the
// stream was in it, then the bus's stored time. Set-ups in the stream are
// passed over: the replay's own takes their place. What the decoder refuses is
// a fault with its position as line.
func ReadStream(ctx context.Context, b *bus.Bus, setup *config.Setup, from Range, opts Options) (*History, error) {
	id, err := b.Identity(ctx)
	if err != nil {
		return nil, err
	}
	s := &streamReader{reader: newReader(opts), from: from, clock: monitor.Beginning}
	s.path = streamName
	// What was trimmed or has expired held the message that ended history time.
	s.live = id.First > b.Begins() && !setup.History
	raws, err := s.gather(ctx, b, setup, id.Last)
	if err != nil {
		return nil, err
	}
	acts := newCopies()
	for i := range raws {
		if setup.Partitions < 2 || !acts.known(&raws[i]) {
			s.message(&raws[i])
		}
	}
	h := s.history
	h.Counts.Files = 1
	h.Counts.Faults = len(h.Faults)
	h.Counts.Rows = h.Counts.Observations + h.Counts.Acts + h.Counts.Faults
	opts.Tape.Sort()
	return h, nil
}

// streamReader reads the messages of a stream.
type streamReader struct {
	*reader
	from  Range
	live  bool
	begun bool // a message of the range was read
	clock monitor.Instant
}

// gather reads the messages of all partitions up to the end, in the stream's
// order.
func (s *streamReader) gather(ctx context.Context, b *bus.Bus, setup *config.Setup, end uint64) ([]bus.Raw, error) {
	var all [][]bus.Raw
	n := 0
	for p := range setup.Partitions {
		last, err := b.EndOf(ctx, p)
		if err != nil {
			return nil, err
		}
		last = min(last, end)
		var raws []bus.Raw
		if last > 0 {
			if raws, err = s.partition(ctx, b, p, last, end); err != nil {
				return nil, fmt.Errorf("partition %d: %w", p, err)
			}
		}
		all = append(all, raws)
		n += len(raws)
	}
	if len(all) == 1 {
		return all[0], nil
	}
	merged := make([]bus.Raw, 0, n)
	for len(merged) < n {
		best := -1
		for p := range all {
			if len(all[p]) > 0 && (best < 0 || all[p][0].Position < all[best][0].Position) {
				best = p
			}
		}
		merged, all[best] = append(merged, all[best][0]), all[best][1:]
	}
	return merged, nil
}

func (s *streamReader) partition(ctx context.Context, b *bus.Bus, number int, last, end uint64) (raws []bus.Raw, err error) {
	source, err := b.Source(ctx, number, 0)
	if err != nil {
		return nil, err
	}
	defer func() {
		if closed := source.Close(); err == nil {
			err = closed
		}
	}()
	for source.Position() < last {
		if raws, err = source.Next(ctx, raws, 4096, 16<<20); err != nil {
			return nil, err
		}
		if s.opts.Progress != nil {
			s.opts.Progress(Progress{File: streamName, Read: int64(source.Position()), Size: int64(end), Rows: len(raws)})
		}
	}
	for len(raws) > 0 && raws[len(raws)-1].Position > last {
		raws = raws[:len(raws)-1]
	}
	return raws, nil
}

// message puts one message onto the tape.
func (s *streamReader) message(raw *bus.Raw) {
	m := s.decoder.Decode(wire.Raw(*raw))
	s.live = s.live || m.Kind == monitor.Live
	at := s.moment(&m)
	s.clock = max(s.clock, at)
	if raw.Position < s.from.Position || s.from.HasTime && s.clock < s.from.Time {
		return
	}
	tape, place := s.opts.Tape, replay.Place{File: streamName, Line: int(raw.Position)}
	if !s.begun && s.live && m.Kind != monitor.Live {
		tape.AddTick(s.clock, true)
	}
	s.begun = true
	switch m.Kind {
	case monitor.Observations:
		for i := range m.Items {
			s.item(&m, &m.Items[i], place)
		}
	case monitor.Rejected:
		s.fault(place.Line, m.Items[0].Reason, m.Items[0].Detail, nil)
	case monitor.ActMessage:
		s.history.Counts.Acts++
		tape.AddAct(m.Act, s.clock, s.live, place)
	case monitor.Tick, monitor.Live:
		if s.clock != monitor.Beginning {
			tape.AddTick(s.clock, m.Kind == monitor.Live)
		}
	case monitor.SettingMessage, monitor.SummaryMessage:
	}
}

// moment is where a message moves the clock; Beginning for nowhere.
func (s *streamReader) moment(m *monitor.Message) monitor.Instant {
	switch {
	case s.live:
		return m.Stored
	case m.HasTime:
		return m.Time
	}
	return monitor.Beginning
}

// item puts one observation onto the tape. In history time without a header it
// becomes known by what it says itself.
func (s *streamReader) item(m *monitor.Message, item *monitor.Item, place replay.Place) {
	o := &item.Observation
	if item.Reason != "" {
		s.fault(place.Line, item.Reason, item.Detail, nil)
		return
	}
	if !s.live && !m.HasTime && (o.HasReported || !o.Retracted) {
		s.clock = max(s.clock, o.HistoryTime())
	}
	s.history.Counts.Observations++
	s.opts.Tape.Add(o, s.clock, false, s.live, place)
}
