package main

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"slices"
	"time"

	"tailbell/alert/outlet"
	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/claim"
	"tailbell/ingest/divide"
	"tailbell/ingest/intake"
	"tailbell/monitor/life"
	"tailbell/monitor/store"
)

// division is a division at work.
type division struct {
	bus         *bus.Bus
	setup, next *config.Setup // with the old and the new number of partitions
	options     divideOptions
	place       divisionPlace

	owners   map[int]claim.Row // the last ones of the old partitions
	old, new []*store.Store
	move     *bus.Division
	result   *divide.Result
	alerts   *divide.Alerts
}

func (v *division) close() error {
	var errs []error
	for _, st := range slices.Concat(v.old, v.new) {
		errs = append(errs, st.Close())
	}
	v.old, v.new = nil, nil
	return errors.Join(errs...)
}

// carry carries the stream over, and sees that the account balances.
func (v *division) carry(ctx context.Context) error {
	v.place = placeOf(v.setup, v.bus.Divisions()+1)
	if err := v.place.make(); err != nil {
		return err
	}
	_, under, err := bus.PartitionsOf(ctx, v.bus)
	if err != nil {
		return err
	}
	if under == 0 {
		if err := v.openOld(ctx); err != nil {
			return err
		}
		if err := v.alignClocks(ctx); err != nil {
			return err
		}
	}
	if v.move, err = v.bus.Divide(ctx, v.next.Partitions); err != nil {
		return err
	}
	// What was published before the stream was closed, and what follows from it.
	if under != 0 {
		err = v.openOld(ctx)
	} else {
		err = v.fillOld(ctx)
	}
	if err != nil {
		return err
	}
	if err := v.move.Begin(ctx); err != nil {
		return err
	}
	v.result, err = divide.Republish(ctx, v.bus, v.move, divide.Options{
		Setup: v.setup, Into: v.next.Partitions, AlertSeries: v.seriesOf, Progress: v.progress,
	})
	if err != nil {
		return err
	}
	after, err := divide.Audit(ctx, v.move, v.setup, v.next.Partitions)
	if err != nil {
		return err
	}
	if differences := v.result.Before.Differences(after); len(differences) > 0 {
		const most = 20
		all := ""
		for _, d := range differences[:min(most, len(differences))] {
			all += "\n  " + d
		}
		return fmt.Errorf("the account does not balance in %s, so nothing was put in place; --give-up takes back what was carried over:%s",
			amount(len(differences), "places"), all)
	}
	return nil
}

func (v *division) progress(read, carried int) {
	if isTerminal(v.options.progress) {
		fmt.Fprintf(v.options.progress, "\rread %d messages, carried over %d", read, carried) //nolint:errcheck // it is only a courtesy
	}
}

// openOld opens the stores of the old partitions, where there are none makes
// some aside, brings them to the stream's end, and sees that every set-up that
// was in force may have the new number of partitions.
func (v *division) openOld(ctx context.Context) error {
	if err := v.readOwners(ctx); err != nil {
		return err
	}
	var standIns []int
	for n := range v.setup.Partitions {
		st, standIn, err := v.oldStore(n)
		if err != nil {
			return err
		}
		v.old = append(v.old, st)
		if err := intake.Verify(ctx, v.bus, st); err != nil {
			return fmt.Errorf("partition %d: %w", n, err)
		}
		if standIn {
			standIns = append(standIns, n)
		}
	}
	if err := v.fillOld(ctx); err != nil {
		return err
	}
	for _, n := range standIns {
		if err := v.catchUpOutlets(v.old[n], n); err != nil {
			return fmt.Errorf("partition %d: %w", n, err)
		}
	}
	for _, st := range v.old {
		settings, err := st.Settings()
		if err != nil {
			return err
		}
		for _, s := range settings {
			if err := fitsPartitions(s.Text, v.next.Partitions); err != nil {
				return fmt.Errorf("version %d, which was in force before: %w", s.Version, err)
			}
		}
	}
	return nil
}

func openOrCreate(path string, id store.Identity) (*store.Store, error) {
	if _, err := os.Stat(path); errors.Is(err, fs.ErrNotExist) {
		return store.Create(path, id, store.Options{})
	}
	return store.Open(path, id, store.Options{})
}

// alignClocks brings the old partitions' clocks to one time, so that new ones
// that take from several of them stand where they do.
func (v *division) alignClocks(ctx context.Context) error {
	if v.next.Partitions%v.setup.Partitions == 0 {
		return nil
	}
	for n := range v.setup.Partitions {
		if _, err := v.bus.Publish(ctx, bus.Outgoing{Partition: n, Kind: bus.Tick}); err != nil {
			return err
		}
	}
	return nil
}

// fillOld brings the old stores to the stream's end.
func (v *division) fillOld(ctx context.Context) error {
	old := &divide.Group{Setup: v.setup, Stores: v.old, From: v.bus, Tell: v.tellOld}
	if err := old.Fill(ctx); err != nil {
		return fmt.Errorf("bringing the stores up to date: %w", err)
	}
	return nil
}

// tellOld publishes what the old partitions have to tell each other. Once the
// division has begun all of it is in the stream: a store that was made from that
// tells it again.
func (v *division) tellOld(ctx context.Context, rows []store.ToldRow) error {
	if v.move != nil && v.move.Begun() {
		return nil
	}
	messages := make([]bus.Outgoing, len(rows))
	for i := range rows {
		messages[i] = summaryOf(&rows[i])
	}
	_, err := v.bus.PublishInOrder(ctx, messages)
	return err
}

func (v *division) seriesOf(partition int, id string) (string, bool) {
	row, err := v.old[partition].Alert(id)
	return row.Record.Series, err == nil
}

// fill makes the stores of the new partitions.
func (v *division) fill(ctx context.Context) error {
	handover, err := divide.HandoverOf(v.old)
	if err != nil {
		return err
	}
	id, err := v.bus.Identity(ctx)
	if err != nil {
		return err
	}
	for q := range v.next.Partitions {
		path := v.place.draft(q)
		if err := os.Remove(path); err != nil && !errors.Is(err, fs.ErrNotExist) {
			return err // of a run that broke off
		}
		st, err := store.Create(path, identityOf(v.next, q), store.Options{})
		if err != nil {
			return err
		}
		v.new = append(v.new, st)
		if err := st.SetStream(store.StreamIdentity{Name: id.Stream, Created: id.Created}); err != nil {
			return err
		}
		if err := handover.Register(st); err != nil {
			return err
		}
	}
	group := &divide.Group{Setup: v.next, Stores: v.new, From: v.move, Tell: v.tellNew}
	if err := group.Fill(ctx); err != nil {
		return fmt.Errorf("filling the new partitions: %w", err)
	}
	for _, st := range v.new {
		if err := handover.Settle(st, v.wants); err != nil {
			return err
		}
	}
	v.alerts, err = divide.CompareAlerts(v.old, v.new)
	return err
}

// tellNew carries what the new partitions have to tell each other, as if it had
// been stored when the last message that the other one has taken was.
func (v *division) tellNew(ctx context.Context, rows []store.ToldRow) error {
	messages, stored := make([]bus.Outgoing, len(rows)), make([]time.Time, len(rows))
	for i := range rows {
		marks, err := v.new[rows[i].Partition].Marks()
		if err != nil {
			return err
		}
		if len(marks) > 0 {
			stored[i] = marks[0].Stored.Time()
		}
		messages[i] = summaryOf(&rows[i])
	}
	return v.move.Carry(ctx, messages, stored)
}

// wants reports whether an outlet is told of a step.
func (v *division) wants(name string, n *life.Notice) bool {
	for i := range v.setup.Outlets {
		if o := &v.setup.Outlets[i]; o.Name == name {
			if wants := outlet.Wants(o); wants != nil {
				return wants(n)
			}
		}
	}
	return name != "terminal" || forPeople(n)
}
