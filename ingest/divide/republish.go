package divide

import (
	"context"
	"errors"
	"fmt"
	"time"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/wire"
	"tailbell/monitor"
)

// perCarry is how many messages are carried over at once.
const perCarry = 1000

// Options say how to carry a stream over.
type Options struct {
	Setup *config.Setup // with the old number of partitions
	Into  int
	// AlertSeries names the series of an alert that an old partition knows.
	AlertSeries func(partition int, id string) (series string, known bool)
	// Progress is told how many messages were read and carried over; it may be
	// nil.
	Progress func(read, carried int)
}

// Result is what Republish did.
type Result struct {
	Before   *Tally // what the old partitions hold
	Read     int    // messages
	Carried  int    // messages, earlier runs included
	Acts     int    // messages with acts that were carried over
	Settings int    // messages with set-ups that were carried over
	// LeftOut are elements and acts that were refused as they came to the
	// wrong partition, where there is no wrong one any more.
	LeftOut int
}

// Republish carries everything over that the division has not carried yet.
func Republish(ctx context.Context, b *bus.Bus, d *bus.Division, o Options) (result *Result, err error) {
	skip, err := d.Carried(ctx)
	if err != nil {
		return nil, err
	}
	r := &republisher{
		Options: o, division: d, skip: skip, result: &Result{Before: NewTally()},
		router: newRouter(o.Setup.Partitions, o.Into, o.Setup.KeyParts, o.AlertSeries),
		live:   map[int]int{}, clocks: map[int]monitor.Instant{}, stored: map[int]time.Time{},
	}
	if r.Progress == nil {
		r.Progress = func(int, int) {}
	}
	defer func() {
		for _, l := range r.lanes {
			err = errors.Join(err, l.close())
		}
	}()
	for n := range o.Setup.Partitions {
		l, err := openLane(ctx, b, o.Setup, n)
		if err != nil {
			return nil, err
		}
		r.lanes = append(r.lanes, l)
		r.clocks[n%r.router.group] = monitor.Beginning
	}
	if err := r.run(ctx); err != nil {
		return nil, err
	}
	r.result.LeftOut = r.router.leftOut
	return r.result, nil
}

type republisher struct {
	Options
	division *bus.Division
	router   *router
	lanes    []*lane
	result   *Result
	skip     int // messages that earlier runs carried over

	live   map[int]int             // by group, how many of its old partitions are live
	clocks map[int]monitor.Instant // by group, the furthest
	stored map[int]time.Time       // by group, when its last message was stored

	waiting []bus.Outgoing
	times   []time.Time
}

func (r *republisher) run(ctx context.Context) error {
	for {
		l, err := r.first(ctx)
		if err != nil {
			return err
		}
		if l == nil {
			break
		}
		p := l.next()
		if err := r.piece(ctx, &p); err != nil {
			return err
		}
	}
	for g := range r.router.group {
		if err := r.bringUp(ctx, g); err != nil {
			return err
		}
	}
	return r.flush(ctx)
}

// first returns the old partition whose clock stands earliest after its next
// piece; of equal ones that of the earliest message.
func (r *republisher) first(ctx context.Context) (*lane, error) {
	var best *lane
	var least *piece
	for _, l := range r.lanes {
		p, err := l.peek(ctx)
		if err != nil {
			return nil, err
		}
		if p != nil && (best == nil || p.clock < least.clock || p.clock == least.clock && p.raw.Position < least.raw.Position) {
			best, least = l, p
		}
	}
	return best, nil
}

// piece carries a piece over.
func (r *republisher) piece(ctx context.Context, p *piece) error {
	g := p.lane.number % r.router.group
	feeders := r.router.from / r.router.group
	r.result.Read++
	r.result.Before.add(&p.message, func(series string) bool { return r.router.lost(series, p.lane.number) })
	r.clocks[g] = max(r.clocks[g], p.clock)
	if p.raw.Stored.After(r.stored[g]) {
		r.stored[g] = p.raw.Stored
	}
	if p.message.Kind == monitor.Live && r.live[g] < feeders {
		if r.live[g]++; r.live[g] == feeders {
			return r.all(ctx, g, p.raw.Stored, map[string][]string{wire.LiveHeader: {"1"}})
		}
		return nil
	}
	if p.history && r.live[g] == feeders {
		return fmt.Errorf("partition %d: position %d lies in history time after its partition went live", p.lane.number, p.raw.Position)
	}
	for _, parcel := range r.router.parcels(p) {
		switch parcel.kind {
		case bus.Act:
			r.result.Acts++
		case bus.Setting:
			r.result.Settings++
		case bus.Observation, bus.Tick, bus.Summary:
		}
		history := r.live[g] < feeders
		if parcel.blind && history && p.clock != monitor.Beginning {
			if err := r.send(ctx, tickAt(parcel.partition, p.clock), p.raw.Stored); err != nil {
				return err
			}
		}
		err := r.send(ctx, bus.Outgoing{
			Partition: parcel.partition, Kind: parcel.kind, Data: parcel.data,
			Header: p.header(parcel.whole, history),
		}, p.raw.Stored)
		if err != nil {
			return err
		}
	}
	return nil
}

// bringUp brings the clocks of a group's new partitions to where those of the
// old ones stand.
func (r *republisher) bringUp(ctx context.Context, g int) error {
	switch clock := r.clocks[g]; {
	case clock == monitor.Beginning:
		return nil
	case r.live[g] == r.router.from/r.router.group:
		return r.all(ctx, g, clock.Time(), nil)
	default:
		return r.all(ctx, g, r.stored[g], map[string][]string{wire.TimeHeader: {wire.FormatTime(clock)}})
	}
}

// tickAt is a tick that brings the clock of history time to a moment.
func tickAt(partition int, clock monitor.Instant) bus.Outgoing {
	return bus.Outgoing{Partition: partition, Kind: bus.Tick, Header: map[string][]string{wire.TimeHeader: {wire.FormatTime(clock)}}}
}

// all sends a tick to every new partition of a group.
func (r *republisher) all(ctx context.Context, g int, stored time.Time, header map[string][]string) error {
	for q := g; q < r.Into; q += r.router.group {
		if err := r.send(ctx, bus.Outgoing{Partition: q, Kind: bus.Tick, Header: header}, stored); err != nil {
			return err
		}
	}
	return nil
}

func (r *republisher) send(ctx context.Context, out bus.Outgoing, stored time.Time) error {
	r.result.Carried++
	if r.skip > 0 { // an earlier run did it
		r.skip--
		return nil
	}
	r.waiting, r.times = append(r.waiting, out), append(r.times, stored)
	if len(r.waiting) < perCarry {
		return nil
	}
	return r.flush(ctx)
}

func (r *republisher) flush(ctx context.Context) error {
	if r.skip > 0 {
		return fmt.Errorf("%d messages more were carried over than there are: give the division up, and begin again", r.skip)
	}
	if err := r.division.Carry(ctx, r.waiting, r.times); err != nil {
		return err
	}
	r.waiting, r.times = r.waiting[:0], r.times[:0]
	r.Progress(r.result.Read, r.result.Carried)
	return nil
}

// Audit reads back what was carried over, and returns its account.
func Audit(ctx context.Context, d *bus.Division, setup *config.Setup, into int) (*Tally, error) {
	t := NewTally()
	for q := range into {
		if err := audit(ctx, d, setup, q, t); err != nil {
			return nil, fmt.Errorf("reading partition %d of %d back: %w", q, into, err)
		}
	}
	return t, nil
}

func audit(ctx context.Context, d *bus.Division, setup *config.Setup, q int, t *Tally) (err error) {
	end, err := d.EndOf(ctx, q)
	if err != nil || end == 0 {
		return err
	}
	source, err := d.Source(ctx, q, 0)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, source.Close()) }()
	decoder := decoderOf(setup)
	for source.Position() < end {
		raws, err := source.Next(ctx, nil, readMessages, readBytes)
		if err != nil {
			return err
		}
		for i := range raws {
			m := decoder.Decode(wire.Raw(raws[i]))
			t.add(&m, func(string) bool { return false })
		}
	}
	return nil
}
