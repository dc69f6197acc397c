package store

import (
	"fmt"

	"tailbell/monitor"

	bolt "go.etcd.io/bbolt"
)

// Archived calls use for all archived slots that are kept, outside of any
// transaction: day by day, those of a day in the order of their writing. A slot
// may come more than once; the last one stands. An error of use ends it and is
// returned.
func (s *Store) Archived(use func(monitor.ArchivedSlot) error) error {
	for at := (archivePlace{}); !at.end; {
		var slots []monitor.ArchivedSlot
		err := s.view(func(tx *bolt.Tx) error {
			var err error
			slots, err = at.read(tx)
			return err
		})
		if err != nil {
			return err
		}
		for _, slot := range slots {
			if err := use(slot); err != nil {
				return fmt.Errorf("archived slot of series %d: %w", slot.Number, err)
			}
		}
	}
	return nil
}

// archivePlace is where reading the archive goes on: at the least key not read of
// the bucket, and of the day's that has it.
type archivePlace struct {
	top, part []byte
	end       bool
}

// beyond is the least key beyond one.
func beyond(key []byte) []byte { return append(append([]byte(nil), key...), 0) }

// read returns the next slots, a part's worth of them.
func (p *archivePlace) read(tx *bolt.Tx) (slots []monitor.ArchivedSlot, err error) {
	h, err := readHead(tx)
	if err != nil {
		return nil, err
	}
	r, err := archiveShelf.in(tx)
	if err != nil {
		return nil, err
	}
	first := dayOf(monitor.Beginning)
	if h.LetGo != nil {
		first = dayOf(h.LetGo.Before)
	}
	size := 0
	take := func(r rack, key, value []byte) error {
		some, err := r.archived(key, value)
		for _, slot := range some {
			if dayOf(slot.Start) >= first {
				slots = append(slots, slot)
			}
		}
		size += len(value)
		return err
	}
	c := r.Cursor()
	for key, value := c.Seek(p.top); size < partSize; key, value = c.Next() {
		switch {
		case key == nil:
			p.end = true
			return slots, nil
		case value != nil: // from before days were kept apart
			err = take(r, key, value)
		case generationOf(key) >= first:
			d := r.day(key)
			inner := d.Cursor()
			for k, v := inner.Seek(p.part); err == nil && k != nil; k, v = inner.Next() {
				if size >= partSize {
					p.top = append([]byte(nil), key...)
					return slots, nil
				}
				p.part = beyond(k)
				err = take(*d, k, v)
			}
		}
		if err != nil {
			return nil, err
		}
		p.top, p.part = beyond(key), nil
	}
	return slots, nil
}
