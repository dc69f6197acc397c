package store

import (
	"encoding/binary"
	"fmt"

	"tailbell/monitor"

	bolt "go.etcd.io/bbolt"
)

// The buckets of summaries are made when the first one comes: only stores that
// take part in sums over several partitions have them.
var (
	toldShelf    = newShelf("told")
	waitingShelf = newShelf("waiting")
)

// ToldRow is a summary that another partition is yet to be told. Numbers run
// from 1.
type ToldRow struct {
	Number uint64
	monitor.OutSummary
}

// optional is in for a bucket that may be missing; false if it is.
func (s shelf) optional(tx *bolt.Tx) (rack, bool) {
	b := tx.Bucket([]byte(s.name))
	if b == nil {
		return rack{}, false
	}
	b.FillPercent = appendFill
	return rack{Bucket: b, shelf: s}, true
}

// made is in for a bucket that is made if it is missing.
func (s shelf) made(tx *bolt.Tx) (rack, error) {
	if _, err := tx.CreateBucketIfNotExists([]byte(s.name)); err != nil {
		return rack{}, fmt.Errorf("bucket %s: %w", s.name, err)
	}
	return s.in(tx)
}

// writeSummaries appends what other partitions are to be told, and keeps and
// lets go of what waits here.
func writeSummaries(tx *bolt.Tx, h *head, changes *monitor.Changes) error {
	if len(changes.Summaries) > 0 {
		r, err := toldShelf.made(tx)
		if err != nil {
			return err
		}
		for _, out := range changes.Summaries {
			h.Told++
			payload := append(binary.BigEndian.AppendUint32(nil, uint32(out.Partition)), out.Data...)
			if err := r.put(number(h.Told), payload); err != nil {
				return err
			}
		}
	}
	if len(changes.Waiting)+len(changes.Gathered) == 0 {
		return nil
	}
	r, err := waitingShelf.made(tx)
	if err != nil {
		return err
	}
	for _, w := range changes.Waiting {
		if err := r.put(number(w.Number), w.Data); err != nil {
			return err
		}
		h.Waiting++
	}
	for _, n := range changes.Gathered {
		if r.Get(number(n)) == nil {
			return fmt.Errorf("summary %d waits no more: %w", n, ErrOrder)
		}
		if err := r.remove(number(n)); err != nil {
			return err
		}
		h.Waiting--
	}
	return nil
}

// Told returns at most so many summaries that other partitions are yet to be
// told, those with numbers beyond after, oldest first.
func (s *Store) Told(after uint64, most int) ([]ToldRow, error) {
	var rows []ToldRow
	err := s.view(func(tx *bolt.Tx) error {
		r, ok := toldShelf.optional(tx)
		if !ok {
			return nil
		}
		cursor := r.Cursor()
		for key, value := cursor.Seek(number(after + 1)); key != nil && len(rows) < most; key, value = cursor.Next() {
			row, err := r.toldRow(key, value)
			if err != nil {
				return err
			}
			rows = append(rows, row)
		}
		return nil
	})
	return rows, err
}

func (r rack) toldRow(key, value []byte) (ToldRow, error) {
	var row ToldRow
	payload, err := r.open(key, value)
	if err != nil {
		return row, err
	}
	if row.Number, err = r.numberOf(key); err != nil {
		return row, err
	}
	if len(payload) < 4 {
		return row, r.damaged(key, "the value is too short")
	}
	row.Partition = int(binary.BigEndian.Uint32(payload))
	row.Data = append([]byte(nil), payload[4:]...)
	return row, nil
}

// DoneTelling notes that other partitions were told all summaries up to a number.
// Saying it again, or of an earlier one, does nothing.
func (s *Store) DoneTelling(n uint64) error {
	return s.update("told", func(tx *bolt.Tx, h *head) error {
		if n > h.Told {
			return fmt.Errorf("summary %d was told, the last one is %d: %w", n, h.Told, ErrOrder)
		}
		r, ok := toldShelf.optional(tx)
		if !ok {
			return nil
		}
		for h.ToldThrough < n {
			h.ToldThrough++
			if err := r.remove(number(h.ToldThrough)); err != nil {
				return err
			}
		}
		return nil
	})
}

// Untold returns how many summaries other partitions are yet to be told.
func (s *Store) Untold() (uint64, error) {
	h, err := s.head()
	return h.Told - h.ToldThrough, err
}

// readWaiting returns the summaries that wait, by number.
func readWaiting(tx *bolt.Tx, h *head) ([]monitor.WaitingSummary, error) {
	var all []monitor.WaitingSummary
	if r, ok := waitingShelf.optional(tx); ok {
		err := r.ForEach(func(key, value []byte) error {
			payload, err := r.open(key, value)
			if err != nil {
				return err
			}
			n, err := r.numberOf(key)
			if err != nil {
				return err
			}
			all = append(all, monitor.WaitingSummary{Number: n, Data: append([]byte(nil), payload...)})
			return nil
		})
		if err != nil {
			return nil, err
		}
	}
	if uint64(len(all)) != h.Waiting {
		return nil, waitingShelf.damaged(nil, fmt.Sprintf("%d summaries instead of %d", len(all), h.Waiting))
	}
	return all, nil
}

// summaries checks what others are to be told, and what waits.
func (c *checker) summaries() error {
	if _, ok := toldShelf.optional(c.tx); ok {
		rows, err := c.run(toldShelf, c.h.ToldThrough+1, c.h.Told, func(r rack, n uint64, payload []byte) error {
			if len(payload) < 4 {
				return r.damaged(number(n), "the value is too short")
			}
			return nil
		})
		if c.report.Told = rows; err != nil {
			return err
		}
	} else if c.h.Told != c.h.ToldThrough {
		return toldShelf.damaged(nil, "the bucket is missing")
	}
	waiting, err := readWaiting(c.tx, &c.h)
	c.report.Waiting = uint64(len(waiting))
	return err
}
