package store

import (
	"encoding/binary"
	"fmt"
	"slices"

	"tailbell/monitor/life"

	bolt "go.etcd.io/bbolt"
)

// AlertRow is an alert's record with its number: alerts count from 1 in the
// order in which they were opened.
type AlertRow struct {
	Number uint64
	Record life.Record
}

// AlertFilter says which alerts are wanted. The zero value wants all, oldest first.
type AlertFilter struct {
	// Conditions, if any, are those wanted.
	Conditions []life.Condition
	// NotDone wants only alerts that are neither closed nor withdrawn; it is
	// answered from an index.
	NotDone bool
	// Indicator, Series and Direction must be equal, unless empty.
	Indicator string
	Series    string
	Direction life.Direction
	// SeriesLike, if not nil, says which names of series are wanted.
	SeriesLike func(series string) bool
	// NewestFirst turns the order round.
	NewestFirst bool
}

func (f *AlertFilter) match(r *life.Record) bool {
	return (len(f.Conditions) == 0 || slices.Contains(f.Conditions, r.Condition)) &&
		(!f.NotDone || !r.Done()) &&
		(f.Indicator == "" || f.Indicator == r.Indicator) &&
		(f.Series == "" || f.Series == r.Series) &&
		(f.Direction == "" || f.Direction == r.Direction) &&
		(f.SeriesLike == nil || f.SeriesLike(r.Series))
}

// writeAlerts stores records as they now stand; a new id gets the next number.
func writeAlerts(tx *bolt.Tx, h *head, records []life.Record) error {
	if len(records) == 0 {
		return nil
	}
	alerts, err := alertsShelf.in(tx)
	if err != nil {
		return err
	}
	ids, err := alertIDsShelf.in(tx)
	if err != nil {
		return err
	}
	open, err := openAlertsShelf.in(tx)
	if err != nil {
		return err
	}
	for i := range records {
		record := &records[i]
		if record.ID == "" {
			return fmt.Errorf("an alert of %s has no id: %w", record.Series, ErrOrder)
		}
		n, known, err := alertNumber(ids, record.ID)
		if err != nil {
			return err
		}
		if !known {
			h.Alerts++
			n = h.Alerts
			if err := ids.put([]byte(record.ID), number(n)); err != nil {
				return err
			}
		}
		if err := alerts.putJSON(number(n), record); err != nil {
			return err
		}
		if err := noteOpen(open, h, n, !record.Done()); err != nil {
			return err
		}
	}
	return nil
}

func noteOpen(open rack, h *head, n uint64, is bool) error {
	was := open.Get(number(n)) != nil
	switch {
	case is && !was:
		h.Open++
		return open.put(number(n), nil)
	case was && !is:
		h.Open--
		return open.remove(number(n))
	}
	return nil
}

func alertNumber(ids rack, id string) (n uint64, known bool, err error) {
	payload, err := ids.get([]byte(id))
	if err != nil || payload == nil {
		return 0, false, err
	}
	if len(payload) != 8 {
		return 0, false, ids.damaged([]byte(id), "it is no number")
	}
	return binary.BigEndian.Uint64(payload), true, nil
}

func alertRow(alerts rack, n uint64) (AlertRow, error) {
	row := AlertRow{Number: n}
	found, err := alerts.getJSON(number(n), &row.Record)
	if err == nil && !found {
		err = alerts.damaged(number(n), "it is missing")
	}
	return row, err
}

// Alert returns the alert with an id; ErrNotFound if there is none.
func (s *Store) Alert(id string) (AlertRow, error) {
	var row AlertRow
	err := s.view(func(tx *bolt.Tx) error {
		alerts, err := alertsShelf.in(tx)
		if err != nil {
			return err
		}
		ids, err := alertIDsShelf.in(tx)
		if err != nil {
			return err
		}
		n, known, err := alertNumber(ids, id)
		if err == nil && !known {
			err = fmt.Errorf("alert %q: %w", id, ErrNotFound)
		}
		if err != nil {
			return err
		}
		row, err = alertRow(alerts, n)
		return err
	})
	return row, err
}

// Alerts returns at most max alerts that pass the filter, beginning after the
// number after (0 for the beginning; with NewestFirst before it, 0 for the end).
func (s *Store) Alerts(filter AlertFilter, after uint64, max int) ([]AlertRow, error) {
	var rows []AlertRow
	for len(rows) < max {
		some, last, err := s.alertsPage(&filter, after, max-len(rows))
		if err != nil {
			return nil, err
		}
		rows = append(rows, some...)
		if last == 0 {
			break
		}
		after = last
	}
	return rows, nil
}

// alertsPage looks at the next pageRows alerts. It returns at most max of those
// that pass, and the number of the last one looked at, 0 if there are no more.
func (s *Store) alertsPage(filter *AlertFilter, after uint64, max int) (rows []AlertRow, last uint64, err error) {
	err = s.view(func(tx *bolt.Tx) error {
		alerts, err := alertsShelf.in(tx)
		if err != nil {
			return err
		}
		numbers := alerts
		if filter.NotDone {
			if numbers, err = openAlertsShelf.in(tx); err != nil {
				return err
			}
		}
		page, err := numbers.page(after, filter.NewestFirst, pageRows)
		if err != nil {
			return err
		}
		if len(page) == pageRows {
			last = page[len(page)-1]
		}
		for _, n := range page {
			row, err := alertRow(alerts, n)
			if err != nil {
				return err
			}
			if filter.match(&row.Record) {
				rows = append(rows, row)
			}
			if len(rows) == max {
				return nil
			}
		}
		return nil
	})
	return rows, last, err
}

// pageRows bounds how many rows are read in one transaction.
const pageRows = 256

// page returns at most max numbers after one, or before it in falling order
// (0 for the outermost).
func (r rack) page(after uint64, falling bool, max int) ([]uint64, error) {
	var page []uint64
	c := r.Cursor()
	step := c.Next
	key, _ := c.Seek(number(after + 1))
	if falling {
		step = c.Prev
		if after == 0 {
			key, _ = c.Last()
		} else if key, _ = c.Seek(number(after)); key == nil {
			key, _ = c.Last()
		} else {
			key, _ = c.Prev()
		}
	}
	for ; key != nil && len(page) < max; key, _ = step() {
		n, err := r.numberOf(key)
		if err != nil {
			return nil, err
		}
		page = append(page, n)
	}
	return page, nil
}
