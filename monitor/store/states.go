package store

import (
	"encoding/binary"
	"fmt"

	"tailbell/monitor"

	bolt "go.etcd.io/bbolt"
)

// writeStates writes the next slice of series whole: the commit's number as a
// varint, then the state.
func writeStates(tx *bolt.Tx, h *head, states []monitor.SeriesChange) error {
	if len(states) == 0 {
		return nil
	}
	r, err := statesShelf.in(tx)
	if err != nil {
		return err
	}
	h.States += r.unwritten(states)
	var key [4]byte
	b := make([]byte, 0, statesSize(states)) // of all values: bbolt keeps them until it commits
	for i := range states {
		c := &states[i]
		binary.BigEndian.PutUint32(key[:], c.Number)
		at := len(b)
		b = binary.AppendUvarint(append(b, frameVersion), h.Commit)
		b = append(b, c.Data...)
		value := r.close(key[:], b[at:])
		if err := r.Put(key[:], value[:len(value):len(value)]); err != nil {
			return fmt.Errorf("bucket %s: %w", r.name, err)
		}
		b = b[:at+len(value)]
	}
	return nil
}

// unwritten counts those of the states, in order of Number, that have never been
// written.
func (r rack) unwritten(states []monitor.SeriesChange) (count uint32) {
	c := r.Cursor()
	at, _ := c.Seek(binary.BigEndian.AppendUint32(nil, states[0].Number))
	for i := range states {
		for at != nil && binary.BigEndian.Uint32(at) < states[i].Number {
			at, _ = c.Next()
		}
		if at == nil || binary.BigEndian.Uint32(at) != states[i].Number {
			count++
		}
	}
	return count
}

// statesSize is the most bytes that the values of the states take.
func statesSize(states []monitor.SeriesChange) (size int) {
	for i := range states {
		size += len(states[i].Data) + frameOverhead + binary.MaxVarintLen64
	}
	return size
}

// state takes a stored state apart; the data share the transaction's memory.
func (r rack) state(key, value []byte) (series uint32, commit uint64, data []byte, err error) {
	payload, err := r.open(key, value)
	if err != nil {
		return 0, 0, nil, err
	}
	f := fields{rest: payload}
	commit = f.uvarint()
	if f.bad || len(key) != 4 {
		return 0, 0, nil, r.damaged(key, "it makes no sense")
	}
	return binary.BigEndian.Uint32(key), commit, f.rest, nil
}

// takeSeries checks that new series continue the numbers without a gap.
func takeSeries(h *head, changes *monitor.Changes) error {
	patched, states, next := changes.Series, changes.States, h.Series
	for i, list := range [][]monitor.SeriesChange{patched, states} {
		for j := 1; j < len(list); j++ {
			if list[j].Number <= list[j-1].Number {
				return fmt.Errorf("series %d after %d in list %d: %w", list[j].Number, list[j-1].Number, i, ErrOrder)
			}
		}
	}
	for len(patched) > 0 || len(states) > 0 {
		var n uint32
		if len(states) == 0 || (len(patched) > 0 && patched[0].Number <= states[0].Number) {
			n, patched = patched[0].Number, patched[1:]
		} else {
			n, states = states[0].Number, states[1:]
		}
		switch {
		case n == next:
			next++
		case n > next:
			return fmt.Errorf("series %d appeared, the next one is %d: %w", n, next, ErrOrder)
		}
	}
	h.Series = next
	if changes.Cycle == 0 && len(changes.States) == 0 {
		return nil // nothing was checkpointed: the round goes on
	}
	if changes.Cycle < h.Cycle {
		return fmt.Errorf("checkpoint round %d after %d: %w", changes.Cycle, h.Cycle, ErrOrder)
	}
	h.Cycle = changes.Cycle
	return nil
}
