package main

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"maps"
	"os"
	"path/filepath"
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
	if under != 0 {
		err = v.openOld(ctx)
	} else {
		err = v.fillOld(ctx)
	}
	if err != nil {
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
	for n, st := range v.old {
		end, err := v.bus.EndOf(ctx, n)
		if err != nil {
			return err
		}
		position, err := st.Position()
		if err != nil || position >= end {
			if err != nil {
				return err
			}
			continue
		}
		source, err := v.bus.Source(ctx, n, position)
		if err != nil {
			return err
		}
		if err := divide.Fill(ctx, st, v.setup, source, end); err != nil {
			return fmt.Errorf("bringing partition %d up to date: %w", n, err)
		}
	}
	return nil
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
		if err := v.fillOne(ctx, st, q, id, handover); err != nil {
			return fmt.Errorf("filling partition %d of %d: %w", q, v.next.Partitions, err)
		}
	}
	if err := v.exchange(ctx); err != nil {
		return err
	}
	for _, st := range v.new {
		if err := handover.Settle(st, v.wants); err != nil {
			return err
		}
	}
	v.alerts, err = divide.CompareAlerts(v.old, v.new)
	return err
}

// exchange lets the new partitions tell each other what sums over several of them
// are to know, until none has anything left to tell.
func (v *division) exchange(ctx context.Context) error {
	for {
		told := false
		for q, st := range v.new {
			did, err := v.tellOthers(ctx, st)
			if err != nil {
				return fmt.Errorf("what partition %d has to tell others: %w", q, err)
			}
			told = told || did
		}
		if !told {
			return nil
		}
		for q, st := range v.new {
			if err := v.fillUp(ctx, st, q); err != nil {
				return fmt.Errorf("filling partition %d of %d: %w", q, v.next.Partitions, err)
			}
		}
	}
}

// tellOthers carries what a new partition has to tell to others, as if it had been
// stored when the last message there was, and reports whether it had anything.
func (v *division) tellOthers(ctx context.Context, st *store.Store) (bool, error) {
	for told := false; ; told = true {
		rows, err := st.Told(0, tellBatch)
		if err != nil || len(rows) == 0 {
			return told, err
		}
		messages, stored := make([]bus.Outgoing, len(rows)), make([]time.Time, len(rows))
		for i, row := range rows {
			marks, err := v.new[row.Partition].Marks()
			if err != nil {
				return told, err
			}
			if len(marks) > 0 {
				stored[i] = marks[0].Stored.Time()
			}
			messages[i] = bus.Outgoing{Partition: row.Partition, Kind: bus.Summary, Data: row.Data}
		}
		if err := v.move.Carry(ctx, messages, stored); err != nil {
			return told, err
		}
		if err := st.DoneTelling(rows[len(rows)-1].Number); err != nil {
			return told, err
		}
	}
}

func (v *division) fillOne(ctx context.Context, st *store.Store, q int, id bus.Identity, handover *divide.Handover) error {
	if err := st.SetStream(store.StreamIdentity{Name: id.Stream, Created: id.Created}); err != nil {
		return err
	}
	if err := handover.Register(st); err != nil {
		return err
	}
	return v.fillUp(ctx, st, q)
}

// fillUp brings the store of a new partition to the end of what was carried over.
func (v *division) fillUp(ctx context.Context, st *store.Store, q int) error {
	end, err := v.move.EndOf(ctx, q)
	if err != nil || end == 0 {
		return err
	}
	position, err := st.Position()
	if err != nil || position >= end {
		return err
	}
	source, err := v.move.Source(ctx, q, position)
	if err != nil {
		return err
	}
	return divide.Fill(ctx, st, v.next, source, end)
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

// divisionReply is what a division did.
type divisionReply struct {
	From     int             `json:"from"`
	Into     int             `json:"into"`
	Before   uint64          `json:"last_position_before"`
	Read     int             `json:"messages_read"`
	Carried  int             `json:"messages_carried_over"`
	Elements int64           `json:"elements"`
	Events   int64           `json:"events"`
	Refused  int64           `json:"not_understood"`
	LeftOut  int             `json:"left_out"`
	Series   []dividedSeries `json:"series"`
	Alerts   *divide.Alerts  `json:"alerts"`
}

type dividedSeries struct {
	Series    string `json:"series"`
	Partition int    `json:"partition"`
	Elements  int64  `json:"elements"`
	Events    int64  `json:"events"`
	Exposure  string `json:"exposure"`
}

func (v *division) reply() *divisionReply {
	t := v.result.Before
	r := &divisionReply{
		From: v.setup.Partitions, Into: v.next.Partitions, Before: v.move.Before(), Read: v.result.Read, Carried: v.result.Carried,
		Elements: t.Elements, Events: t.Events, LeftOut: v.result.LeftOut, Series: []dividedSeries{}, Alerts: v.alerts,
	}
	for _, n := range t.Refused {
		r.Refused += n
	}
	for _, name := range slices.Sorted(maps.Keys(t.Series)) {
		s := t.Series[name]
		r.Series = append(r.Series, dividedSeries{
			name, config.PartitionOf(name, v.setup.KeyParts, v.next.Partitions), s.Elements, s.Events, s.Exposure(),
		})
	}
	return r
}

// divisionPlace is the folder of a division's drafts, and of what they replace.
type divisionPlace string

func placeOf(setup *config.Setup, number uint64) divisionPlace {
	return divisionPlace(filepath.Join(setup.Folder, fmt.Sprintf("division-%d", number)))
}

func (p divisionPlace) drafts() string { return filepath.Join(string(p), "new") }
func (p divisionPlace) aside() string  { return filepath.Join(string(p), "before") }

// draft is the new store of a partition.
func (p divisionPlace) draft(n int) string {
	return filepath.Join(p.drafts(), fmt.Sprintf("partition-%d.store", n))
}

// stand is a store of an old partition that had none.
func (p divisionPlace) stand(n int) string {
	return filepath.Join(string(p), fmt.Sprintf("partition-%d.store", n))
}

func (p divisionPlace) make() error { return os.MkdirAll(p.drafts(), 0o700) }

func (p divisionPlace) clear() error { return os.RemoveAll(string(p)) }

// swap puts the drafts in the place of the stores. It may be done again after
// it broke off; it reports whether there was anything to do.
func (p divisionPlace) swap(setup, next *config.Setup) (did bool, err error) {
	if _, err := os.Stat(p.drafts()); errors.Is(err, fs.ErrNotExist) {
		return false, nil
	} else if err != nil {
		return false, err
	}
	if err := p.putAside(next); err != nil {
		return false, err
	}
	for q := range next.Partitions {
		err := os.Rename(p.draft(q), storePath(setup, q))
		if err != nil && !errors.Is(err, fs.ErrNotExist) {
			return false, err
		}
	}
	for n := range setup.Partitions {
		if err := os.Remove(p.stand(n)); err != nil && !errors.Is(err, fs.ErrNotExist) {
			return false, err
		}
	}
	return true, os.Remove(p.drafts())
}

// putAside moves the stores that are not of the new partitions.
func (p divisionPlace) putAside(next *config.Setup) error {
	if err := os.MkdirAll(p.aside(), 0o700); err != nil {
		return err
	}
	entries, err := os.ReadDir(next.Folder)
	if err != nil {
		return err
	}
	for _, entry := range entries {
		file := filepath.Join(next.Folder, entry.Name())
		if ours, err := filepath.Match("partition-*.store", entry.Name()); err != nil || !ours {
			continue
		}
		st, err := store.OpenReadOnly(file, store.Options{})
		if err != nil {
			return err
		}
		id := st.Identity()
		if err := st.Close(); err != nil {
			return err
		}
		if id.Partitions == next.Partitions {
			continue // it is in place already
		}
		if err := os.Rename(file, filepath.Join(p.aside(), filepath.Base(file))); err != nil {
			return err
		}
	}
	return nil
}
