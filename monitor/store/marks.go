package store

import (
	"encoding/binary"
	"encoding/hex"
	"fmt"

	"tailbell/monitor"

	bolt "go.etcd.io/bbolt"
)

// Mark is how a message of the stream is recognised again: the digest of its
// bytes at its position. A few marks are kept, so that a stream that was rolled
// back, recreated or changed is noticed.
type Mark struct {
	Position uint64
	// Digest of the message's bytes.
	Digest [32]byte
	// Stored is when the bus stored it.
	Stored monitor.Instant
}

// String returns the mark in words.
func (m Mark) String() string {
	return fmt.Sprintf("position %d, digest %s", m.Position, hex.EncodeToString(m.Digest[:8]))
}

// nearMarks is how many of the newest marks are kept whatever their distance.
const nearMarks = 8

// Marks returns the marks kept, newest first: the last few, and older ones at
// distances that at most about double from one to the next.
func (s *Store) Marks() ([]Mark, error) {
	var marks []Mark
	err := s.view(func(tx *bolt.Tx) error {
		var err error
		marks, err = readMarks(tx)
		return err
	})
	return marks, err
}

func readMarks(tx *bolt.Tx) ([]Mark, error) {
	r, err := marksShelf.in(tx)
	if err != nil {
		return nil, err
	}
	var marks []Mark
	c := r.Cursor()
	for key, value := c.Last(); key != nil; key, value = c.Prev() {
		m, err := r.mark(key, value)
		if err != nil {
			return nil, err
		}
		marks = append(marks, m)
	}
	return marks, nil
}

func (r rack) mark(key, value []byte) (Mark, error) {
	var m Mark
	payload, err := r.open(key, value)
	if err != nil {
		return m, err
	}
	if m.Position, err = r.numberOf(key); err != nil {
		return m, err
	}
	if len(payload) != 40 {
		return m, r.damaged(key, "it has another length")
	}
	copy(m.Digest[:], payload)
	m.Stored = monitor.Instant(binary.BigEndian.Uint64(payload[32:]))
	return m, nil
}

func putMark(tx *bolt.Tx, h *head, m Mark) error {
	r, err := marksShelf.in(tx)
	if err != nil {
		return err
	}
	kept, err := readMarks(tx)
	if err != nil {
		return err
	}
	payload := binary.BigEndian.AppendUint64(m.Digest[:], uint64(m.Stored))
	if err := r.put(number(m.Position), payload); err != nil {
		return err
	}
	h.Marks = len(kept) + 1
	for _, position := range thin(m.Position, kept) {
		if err := r.remove(number(position)); err != nil {
			return err
		}
		h.Marks--
	}
	return nil
}

// thin returns which of the kept marks, newest first, are not needed beside a
// new one at last. Past the nearest ones, a mark goes if the next older one is
// at most twice as far away as the next newer one that stays; so about two
// stay for every doubling of the distance, and the oldest stays for good.
func thin(last uint64, kept []Mark) []uint64 {
	if len(kept) < nearMarks {
		return nil
	}
	var gone []uint64
	newer := kept[nearMarks-2].Position
	for i := nearMarks - 1; i+1 < len(kept); i++ {
		if last-kept[i+1].Position <= 2*(last-newer) {
			gone = append(gone, kept[i].Position)
		} else {
			newer = kept[i].Position
		}
	}
	return gone
}

func clearMarks(tx *bolt.Tx, h *head) error {
	name := []byte(marksShelf.name)
	if err := tx.DeleteBucket(name); err != nil {
		return fmt.Errorf("bucket %s: %w", marksShelf.name, err)
	}
	if _, err := tx.CreateBucket(name); err != nil {
		return fmt.Errorf("bucket %s: %w", marksShelf.name, err)
	}
	h.Marks = 0
	return nil
}
