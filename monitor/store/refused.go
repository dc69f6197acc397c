package store

import (
	"fmt"
	"math"
	"slices"
	"time"

	"tailbell/monitor"

	bolt "go.etcd.io/bbolt"
)

// Retention bounds what is kept of refusals. Their original bytes go first;
// the rows go when there are very many; the counts by reason stay for good.
type Retention struct {
	// RawAge is how long the original bytes are kept, by the bus's stored
	// time. 0 means 30 days.
	RawAge time.Duration
	// RawBytes is how many of them are kept at most. 0 means 256 MiB.
	RawBytes uint64
	// Rows is how many refusals are kept at most. 0 means a million.
	Rows uint64
}

func (r Retention) withDefaults() Retention {
	if r.RawAge <= 0 {
		r.RawAge = 30 * 24 * time.Hour
	}
	if r.RawBytes == 0 {
		r.RawBytes = 256 << 20
	}
	if r.Rows == 0 {
		r.Rows = 1_000_000
	}
	return r
}

// expireKeys bounds how many refusals a commit lets expire beyond those it adds.
const expireKeys = 512

// RefusedRow is a refusal with its number: refusals count from 1 in stream order.
type RefusedRow struct {
	Number  uint64
	Refusal monitor.Refusal
	// Expired says that the original bytes are not kept any more.
	Expired bool
}

// refusedRecord is the stored form: the bytes lie in a bucket of their own.
type refusedRecord struct {
	monitor.Refusal
	// Kept is the bus's stored time at the commit.
	Kept monitor.Instant `json:"kept"`
	// Bytes is how many original bytes there were.
	Bytes uint64 `json:"bytes"`
}

// writeRefused appends refusals and lets old ones expire.
func writeRefused(tx *bolt.Tx, h *head, refusals []monitor.Refusal, retention Retention) error {
	rows, err := refusedShelf.in(tx)
	if err != nil {
		return err
	}
	raws, err := refusedRawShelf.in(tx)
	if err != nil {
		return err
	}
	for _, refusal := range refusals {
		h.Refused++
		record := refusedRecord{Refusal: refusal, Kept: h.Stored, Bytes: uint64(len(refusal.Raw))}
		record.Raw = nil
		if err := rows.putJSON(number(h.Refused), record); err != nil {
			return err
		}
		if err := raws.put(number(h.Refused), refusal.Raw); err != nil {
			return err
		}
		h.Raw++
		h.RawBytes += record.Bytes
	}
	if err := countReasons(tx, refusals); err != nil {
		return err
	}
	limit := len(refusals) + expireKeys
	if err := expireRaw(rows, raws, h, retention, limit); err != nil {
		return err
	}
	for ; limit > 0 && h.Refused-h.RefusedFirst+1 > retention.Rows && h.RefusedFirst < h.RawFirst; limit-- {
		if err := rows.remove(number(h.RefusedFirst)); err != nil {
			return err
		}
		h.RefusedFirst++
	}
	return nil
}

// expireRaw removes the original bytes of the oldest refusals while they are
// too old, too many, or about to lose their row.
func expireRaw(rows, raws rack, h *head, retention Retention, limit int) error {
	oldest := saturatingSub(h.Stored, retention.RawAge)
	for ; limit > 0 && h.RawFirst <= h.Refused; limit-- {
		var record refusedRecord
		found, err := rows.getJSON(number(h.RawFirst), &record)
		if err == nil && !found {
			err = rows.damaged(number(h.RawFirst), "it is missing")
		}
		if err != nil {
			return err
		}
		crowded := h.Refused-h.RawFirst+1 > retention.Rows
		if max(record.Kept, h.FirstStored) >= oldest && h.RawBytes <= retention.RawBytes && !crowded {
			return nil
		}
		if err := raws.remove(number(h.RawFirst)); err != nil {
			return err
		}
		h.Raw--
		h.RawBytes -= min(record.Bytes, h.RawBytes)
		h.RawFirst++
	}
	return nil
}

func saturatingSub(at monitor.Instant, d time.Duration) monitor.Instant {
	if step := monitor.Instant(d / time.Microsecond); at >= math.MinInt64+step {
		return at - step
	}
	return monitor.Beginning
}

func countReasons(tx *bolt.Tx, refusals []monitor.Refusal) error {
	if len(refusals) == 0 {
		return nil
	}
	r, err := headShelf.in(tx)
	if err != nil {
		return err
	}
	counts := map[monitor.Reason]uint64{}
	if _, err := r.getJSON(reasonsKey, &counts); err != nil {
		return err
	}
	for _, refusal := range refusals {
		counts[refusal.Reason]++
	}
	return r.putJSON(reasonsKey, counts)
}

// RefusedCount returns how many items were ever refused, by reason.
func (s *Store) RefusedCount() (map[monitor.Reason]uint64, error) {
	counts := map[monitor.Reason]uint64{}
	err := s.view(func(tx *bolt.Tx) error {
		r, err := headShelf.in(tx)
		if err != nil {
			return err
		}
		_, err = r.getJSON(reasonsKey, &counts)
		return err
	})
	return counts, err
}

// Refused returns at most max refusals after a number (0 for the beginning),
// in stream order, with their original bytes where they have not expired.
func (s *Store) Refused(after uint64, max int) ([]RefusedRow, error) {
	var rows []RefusedRow
	for len(rows) < max {
		more := false
		err := s.view(func(tx *bolt.Tx) error {
			r, raws, err := refusedRacks(tx)
			if err != nil {
				return err
			}
			want := min(pageRows, max-len(rows))
			page, err := r.page(after, false, want)
			if err != nil {
				return err
			}
			more = len(page) == want
			for _, n := range page {
				row, err := refusedRow(r, raws, n)
				if err != nil {
					return err
				}
				rows, after = append(rows, row), n
			}
			return nil
		})
		if err != nil {
			return nil, err
		}
		if !more {
			break
		}
	}
	return rows, nil
}

// RefusedOne returns one refusal by its number; ErrNotFound if there is none
// or its row is not kept any more.
func (s *Store) RefusedOne(n uint64) (RefusedRow, error) {
	var row RefusedRow
	err := s.view(func(tx *bolt.Tx) error {
		r, raws, err := refusedRacks(tx)
		if err != nil {
			return err
		}
		if r.Get(number(n)) == nil {
			return fmt.Errorf("refusal %d: %w", n, ErrNotFound)
		}
		row, err = refusedRow(r, raws, n)
		return err
	})
	return row, err
}

// RefusedAt returns the refusals of the message at a position, in order. It
// looks from the newest one back, so that it is quick for what just happened.
func (s *Store) RefusedAt(position uint64) ([]RefusedRow, error) {
	var rows []RefusedRow
	for before, done := uint64(0), false; !done; {
		err := s.view(func(tx *bolt.Tx) error {
			r, raws, err := refusedRacks(tx)
			if err != nil {
				return err
			}
			page, err := r.page(before, true, pageRows)
			if err != nil {
				return err
			}
			done = len(page) < pageRows
			for _, n := range page {
				row, err := refusedRow(r, raws, n)
				if err != nil {
					return err
				}
				if row.Refusal.Position == position {
					rows = append(rows, row)
				}
				before, done = n, done || row.Refusal.Position < position
			}
			return nil
		})
		if err != nil {
			return nil, err
		}
	}
	slices.Reverse(rows)
	return rows, nil
}

func refusedRacks(tx *bolt.Tx) (rows, raws rack, err error) {
	if rows, err = refusedShelf.in(tx); err != nil {
		return rows, raws, err
	}
	raws, err = refusedRawShelf.in(tx)
	return rows, raws, err
}

func refusedRow(rows, raws rack, n uint64) (RefusedRow, error) {
	var record refusedRecord
	if _, err := rows.getJSON(number(n), &record); err != nil {
		return RefusedRow{}, err
	}
	row := RefusedRow{Number: n, Refusal: record.Refusal}
	raw, err := raws.get(number(n))
	if err != nil {
		return row, err
	}
	row.Expired = raw == nil
	row.Refusal.Raw = append([]byte(nil), raw...)
	if uint64(len(raw)) != record.Bytes && !row.Expired {
		return row, raws.damaged(number(n), "its length is not that of its row")
	}
	return row, nil
}
