// Package feed publishes a history into the stream.
//
// Entries go to the partition of their series, in the order of their history
// times; consecutive ones of the same time share a message. Every message
// carries its time in a header, by which a store in history time goes. Every
// observation has an id (given or derived), so that feeding the same file
// again counts nothing twice; what was refused left no id and is counted when
// it is fed again under a better set-up.
//
// Caveat: an indicator with ids = "none" can't tell a repeat. Check says so
// beforehand.
package feed

import (
	"context"
	"fmt"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/history"
	"tailbell/ingest/wire"
	"tailbell/monitor"
)

// Limits of one message and one batch.
const (
	perMessage   = 500
	messageBytes = 128 << 10
	perBatch     = 500
)

// Progress is told how many of the entries are published for certain.
type Progress func(entries int)

// Publish publishes the entries and returns how many are stored for certain.
func Publish(ctx context.Context, b *bus.Bus, setup *config.Setup, entries []history.Entry, progress Progress) (int, error) {
	p := packer{setup: setup, limit: min(messageBytes, setup.Limits.MaxMessageBytes)}
	done := 0
	flush := func() error {
		n, err := b.PublishBatch(ctx, p.messages)
		for _, held := range p.held[:n] {
			done += held
		}
		progress(done)
		p.messages, p.held = p.messages[:0], p.held[:0]
		return err
	}
	for i := range entries {
		if err := p.add(&entries[i]); err != nil {
			return done, err
		}
		if len(p.messages) >= perBatch {
			if err := flush(); err != nil {
				return done, err
			}
		}
	}
	return done, flush()
}

// packer packs entries into messages.
type packer struct {
	setup    *config.Setup
	limit    int
	messages []bus.Outgoing
	held     []int // entries in each message
	last     monitor.Instant
	lastAct  bool
}

func (p *packer) add(e *history.Entry) error {
	partition, err := p.partitionOf(e)
	if err != nil {
		return err
	}
	if n := len(p.messages) - 1; n >= 0 && !e.IsAct && !p.lastAct && e.Time == p.last {
		if m := &p.messages[n]; m.Partition == partition && p.held[n] < perMessage && len(m.Data)+1+len(e.JSON) <= p.limit {
			m.Data = append(append(m.Data, '\n'), e.JSON...)
			p.held[n]++
			return nil
		}
	}
	kind := bus.Observation
	if e.IsAct {
		kind = bus.Act
	}
	p.messages = append(p.messages, bus.Outgoing{
		Partition: partition, Kind: kind, Data: append([]byte(nil), e.JSON...),
		Header: map[string][]string{wire.TimeHeader: {wire.FormatTime(e.Time)}},
	})
	p.held = append(p.held, 1)
	p.last, p.lastAct = e.Time, e.IsAct
	return nil
}

// partitionOf returns the partition of the entry's series.
func (p *packer) partitionOf(e *history.Entry) (int, error) {
	if p.setup.Partitions == 1 {
		return 0, nil
	}
	series := ""
	d := wire.NewDecoder(wire.Limits{})
	if e.IsAct {
		act, reason, detail := d.Act(e.JSON)
		if reason != "" || act.Series == "" {
			return 0, fmt.Errorf("%s:%d: with several partitions an act must name a series %s", e.File, e.Line, detail)
		}
		series = act.Series
	} else {
		series = d.Observation(e.JSON).Observation.Series
	}
	return p.setup.PartitionOf(series), nil
}

// Check returns the indicators of the set-up that keep no ids although the
// history has series of theirs: feeding it again would count it again.
func Check(setup *config.Setup, entries []history.Entry) []string {
	d := wire.NewDecoder(wire.Limits{})
	count := make([]int, len(setup.Indicators))
	for i := range entries {
		if entries[i].IsAct {
			continue
		}
		series := d.Observation(entries[i].JSON).Observation.Series
		for n := range setup.Indicators {
			if in := &setup.Indicators[n]; !in.KeepIDs && in.Matches(series) {
				count[n]++
			}
		}
	}
	var names []string
	for n := range count {
		if count[n] > 0 {
			names = append(names, setup.Indicators[n].Name)
		}
	}
	return names
}
