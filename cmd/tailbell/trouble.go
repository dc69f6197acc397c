package main

import (
	"cmp"
	"context"
	"fmt"
	"slices"
	"sync"
	"time"

	"tailbell/ingest/bus"
	"tailbell/ingest/intake"
	"tailbell/monitor/store"
)

// troubleKind is the kind of a trouble, as shown.
type troubleKind string

// The kinds of trouble.
const (
	troubleBus         troubleKind = "bus away"            // the connection is lost
	troubleClock       troubleKind = "bus clock leapt"     // the intake is held
	troubleMissing     troubleKind = "messages missing"    // removed before they could be read
	troubleNoRoom      troubleKind = "no room"             // nothing can be stored
	troubleUndelivered troubleKind = "steps not delivered" // an outlet fails
	troubleUnowned     troubleKind = "no owner"            // no process answers for the partition
	troubleWaiting     troubleKind = "takes no part"       // the process owns nothing, and why
)

// stops reports whether the trouble keeps the daemon from reading on.
func (k troubleKind) stops() bool {
	return k == troubleBus || k == troubleClock || k == troubleNoRoom
}

// everyPartition stands for all of them.
const everyPartition = -1

// trouble is something that keeps the daemon from its work, or that it could
// not do; unlike a condition it says nothing of a series.
type trouble struct {
	Kind troubleKind `json:"kind"`
	// Partition is -1 for all.
	Partition int       `json:"partition"`
	Since     time.Time `json:"since,omitzero"`
	Text      string    `json:"text"`
}

// troubles are those that stand. The zero value holds none.
type troubles struct {
	mu   sync.Mutex
	list []trouble
}

// set notes that a trouble stands, or what it now says.
func (t *troubles) set(kind troubleKind, partition int, text string) {
	t.mu.Lock()
	defer t.mu.Unlock()
	for i := range t.list {
		if t.list[i].Kind == kind && t.list[i].Partition == partition {
			t.list[i].Text = text
			return
		}
	}
	t.list = append(t.list, trouble{kind, partition, time.Now().UTC().Truncate(time.Second), text})
}

// clear notes that a trouble has passed.
func (t *troubles) clear(kind troubleKind, partition int) {
	t.mu.Lock()
	defer t.mu.Unlock()
	t.list = slices.DeleteFunc(t.list, func(one trouble) bool { return one.Kind == kind && one.Partition == partition })
}

func (t *troubles) all() []trouble {
	t.mu.Lock()
	defer t.mu.Unlock()
	return slices.Clone(t.list)
}

// standing returns every trouble that stands, by partition.
func (d *daemon) standing() ([]trouble, error) {
	all := d.troubles.all()
	for i := range all {
		if n := d.bus.Tries(); all[i].Kind == troubleBus && n > 0 {
			all[i].Text = fmt.Sprintf("%s; tried %d times to come back", all[i].Text, n)
		}
	}
	if d.member != nil {
		if why := d.member.keeper.Waits(); why != "" {
			all = append(all, trouble{Kind: troubleWaiting, Partition: everyPartition, Text: why})
		}
	}
	for _, p := range d.parts.all() {
		outlets, err := p.store.OutletState()
		if err != nil {
			return nil, err
		}
		for _, o := range outlets {
			if text := p.undelivered(o); text != "" {
				all = append(all, trouble{Kind: troubleUndelivered, Partition: p.number, Text: text})
			}
		}
	}
	slices.SortStableFunc(all, func(a, b trouble) int { return cmp.Compare(a.Partition, b.Partition) })
	return all, nil
}

// undelivered says why steps wait for an outlet, "" if nothing is wrong.
func (p *part) undelivered(o store.Outlet) string {
	for _, q := range p.queues {
		if q.Name() != o.Name {
			continue
		}
		if t := q.Trouble(); t.Tries > 0 {
			return fmt.Sprintf("%d steps wait for outlet %s: %d tries in a row failed, the next one within %s: %s",
				o.Depth, o.Name, t.Tries, t.Pause.Round(100*time.Millisecond), t.Error)
		}
		return ""
	}
	if o.Depth == 0 {
		return ""
	}
	return fmt.Sprintf("%d steps wait for outlet %s, which the set-up no longer names", o.Depth, o.Name)
}

// busState notes that the connection is lost or back.
func (d *daemon) busState(s bus.State, err error) {
	switch s {
	case bus.Connected:
		d.log.Info().Msg("the bus is back")
		d.troubles.clear(troubleBus, everyPartition)
	case bus.Disconnected:
		text := "the connection to the bus is lost"
		if err != nil {
			text += ": " + err.Error()
		}
		d.log.Error().Msg(text)
		d.troubles.set(troubleBus, everyPartition, text)
	case bus.Closed:
	}
}

// answerTime is how long a status waits for the bus.
const answerTime = 2 * time.Second

// endOf asks the bus for the end of a partition's messages.
func (d *daemon) endOf(ctx context.Context, p *part) (uint64, error) {
	ctx, cancel := context.WithTimeout(ctx, answerTime)
	defer cancel()
	return d.bus.EndOf(ctx, p.number)
}

// gap notes messages that were removed before they could be read.
func (d *daemon) gap(partition int, m bus.Missing) {
	text := fmt.Sprintf("%d messages were removed from the stream before they could be read, the last ones from position %d to %d",
		m.Messages, m.From, m.To)
	d.log.Error().Int("partition", partition).Msg(text)
	d.troubles.set(troubleMissing, partition, text)
}

// held notes that a partition's intake is held, or with nil that it goes on.
func (d *daemon) held(partition int, h *intake.Hold) {
	if h == nil {
		d.log.Info().Int("partition", partition).Msg("the intake goes on")
		d.troubles.clear(troubleClock, partition)
		return
	}
	text := "the intake is held: " + h.String() +
		"; it goes on when the local clock gets there, or if tailbell clock accept says that the bus is right"
	d.log.Error().Int("partition", partition).Msg(text)
	d.troubles.set(troubleClock, partition, text)
}
