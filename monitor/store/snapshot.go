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
		snap.Position = h.Position
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

// readSeries returns the last whole state of every series with the patches
// kept, oldest first.
func readSeries(tx *bolt.Tx, h *head) ([]monitor.SeriesImage, error) {
	r, err := statesShelf.in(tx)
	if err != nil {
		return nil, err
	}
	series, states := make([]monitor.SeriesImage, h.Series), uint32(0)
	err = r.ForEach(func(key, value []byte) error {
		n, _, data, err := r.state(key, value)
		if err != nil {
			return err
		}
		if n >= h.Series {
			return r.damaged(key, fmt.Sprintf("there are %d series", h.Series))
		}
		series[n].State = append([]byte{}, data...)
		states++
		return nil
	})
	if err == nil && states != h.States {
		err = r.damaged(nil, fmt.Sprintf("%d states instead of %d", states, h.States))
	}
	if err != nil {
		return nil, err
	}
	err = eachPart(tx, h, func(key []byte, p part) error {
		stray := false
		err := p.each(func(n uint32, data []byte) {
			if n >= h.Series {
				stray = true
				return
			}
			series[n].Patches = append(series[n].Patches, append([]byte{}, data...))
		})
		if err == nil && stray {
			err = journalShelf.damaged(key, fmt.Sprintf("there are %d series", h.Series))
		}
		return err
	})
	return series, err
}

// readIDs returns the ids of all generations in the order of their writing.
func readIDs(tx *bolt.Tx, h *head) ([]monitor.IDChange, error) {
	var all []shelved
	err := eachGeneration(tx, h, func(_ int64, ids []shelved) error {
		all = append(all, ids...)
		return nil
	})
	if err != nil || len(all) == 0 {
		return nil, err
	}
	slices.SortFunc(all, func(a, b shelved) int { return cmp.Compare(a.number, b.number) })
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
