package store

import (
	"encoding/binary"
	"fmt"

	"tailbell/monitor"

	bolt "go.etcd.io/bbolt"
)

// Archived slots are appended as they come, many to a value. The key is the
// commit's number (8 bytes) and the part (4 bytes); a part is
//
//	(series number | start | length | data)*
//
// with varints, the start's being signed.

func writeArchive(tx *bolt.Tx, h *head, slots []monitor.ArchivedSlot) error {
	if len(slots) == 0 {
		return nil
	}
	r, err := archiveShelf.in(tx)
	if err != nil {
		return err
	}
	var b []byte
	part := uint32(0)
	for i, slot := range slots {
		b = binary.AppendUvarint(b, uint64(slot.Number))
		b = binary.AppendVarint(b, int64(slot.Start))
		b = binary.AppendUvarint(b, uint64(len(slot.Data)))
		b = append(b, slot.Data...)
		if len(b) < partSize && i+1 < len(slots) {
			continue
		}
		if err := r.put(journalKey(h.Commit, part), b); err != nil {
			return err
		}
		b, part = b[:0], part+1
	}
	h.ArchiveParts += uint64(part)
	h.Archived += uint64(len(slots))
	return nil
}

// archived takes a part apart; the data are copies.
func (r rack) archived(key, value []byte) ([]monitor.ArchivedSlot, error) {
	payload, err := r.open(key, value)
	if err != nil {
		return nil, err
	}
	var slots []monitor.ArchivedSlot
	f := fields{rest: payload}
	for len(f.rest) > 0 {
		n, start := f.uvarint(), f.varint()
		data := f.bytes(f.uvarint())
		if f.bad || n >= 1<<32 {
			return nil, r.damaged(key, "a slot makes no sense")
		}
		slots = append(slots, monitor.ArchivedSlot{
			Number: uint32(n), Start: monitor.Instant(start), Data: append([]byte{}, data...),
		})
	}
	return slots, nil
}

// Archived calls use for all archived slots in the order of their writing,
// outside of any transaction. A slot may come more than once; the last one
// stands. An error of use ends it and is returned.
func (s *Store) Archived(use func(monitor.ArchivedSlot) error) error {
	var after []byte
	for {
		var slots []monitor.ArchivedSlot
		err := s.view(func(tx *bolt.Tx) error {
			r, err := archiveShelf.in(tx)
			if err != nil {
				return err
			}
			c, size := r.Cursor(), 0
			key, value := c.Seek(after)
			for ; key != nil && size < partSize; key, value = c.Next() {
				some, err := r.archived(key, value)
				if err != nil {
					return err
				}
				slots, size = append(slots, some...), size+len(value)
				after = append(append(after[:0], key...), 0) // the least key beyond it
			}
			return nil
		})
		if err != nil {
			return err
		}
		if len(slots) == 0 {
			return nil
		}
		for _, slot := range slots {
			if err := use(slot); err != nil {
				return fmt.Errorf("archived slot of series %d: %w", slot.Number, err)
			}
		}
	}
}
