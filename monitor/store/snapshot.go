package store

import (
	"cmp"
	"fmt"
	"slices"

	"tailbell/monitor"

	bolt "go.etcd.io/bbolt"
)

// Snapshot returns all that an engine needs to go on after the stored
// position. Every value that it reads is checked. It is meant for the start,
// before anything is committed.
func (s *Store) Snapshot() (monitor.Snapshot, error) {
	var snap monitor.Snapshot
	err := s.view(func(tx *bolt.Tx) error {
		h, err := readHead(tx)
		if err != nil {
			return err
		}
		snap.Position, snap.Renumbered = h.Position, h.Renumbered
		if snap.Header, err = readHeader(tx, &h); err != nil {
			return err
		}
		if snap.Series, err = readSeries(tx, &h); err != nil {
			return err
		}
		if snap.IDs, err = readIDs(tx, &h); err != nil {
			return err
		}
		if snap.Settings, err = readSettings(tx); err != nil {
			return err
		}
		if snap.Waiting, err = readWaiting(tx, &h); err != nil {
			return err
		}
		if len(snap.Settings) != h.Settings {
			return settingsShelf.damaged(nil, fmt.Sprintf("%d set-ups instead of %d", len(snap.Settings), h.Settings))
		}
		return readOpenAlerts(tx, &h, &snap)
	})
	return snap, err
}

// readIDs returns the ids of all generations in the order of their writing.
func readIDs(tx *bolt.Tx, h *head) ([]monitor.IDChange, error) {
	var all []shelved
	err := eachGeneration(tx, h, func(_ int64, ids []shelved) error {
		if all == nil {
			all = ids
		} else {
			all = append(all, ids...)
		}
		return nil
	})
	if err != nil || len(all) == 0 {
		return nil, err
	}
	byNumber := func(a, b shelved) int { return cmp.Compare(a.number, b.number) }
	if !slices.IsSortedFunc(all, byNumber) {
		slices.SortFunc(all, byNumber)
	}
	ids := make([]monitor.IDChange, len(all))
	for i := range all {
		ids[i] = all[i].id
	}
	return ids, nil
}

func readOpenAlerts(tx *bolt.Tx, h *head, snap *monitor.Snapshot) error {
	open, err := openAlertsShelf.in(tx)
	if err != nil {
		return err
	}
	alerts, err := alertsShelf.in(tx)
	if err != nil {
		return err
	}
	err = open.ForEach(func(key, value []byte) error {
		if _, err := open.open(key, value); err != nil {
			return err
		}
		n, err := open.numberOf(key)
		if err != nil {
			return err
		}
		row, err := alertRow(alerts, n)
		if err != nil {
			return err
		}
		snap.Alerts = append(snap.Alerts, row.Record)
		return nil
	})
	if err == nil && uint64(len(snap.Alerts)) != h.Open {
		err = open.damaged(nil, fmt.Sprintf("%d alerts instead of %d", len(snap.Alerts), h.Open))
	}
	return err
}
