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
	var b []byte
	for _, c := range states {
		key := binary.BigEndian.AppendUint32(nil, c.Number)
		if r.Get(key) == nil {
			h.States++
		}
		b = binary.AppendUvarint(b[:0], h.Commit)
		b = append(b, c.Data...)
		if err := r.put(key, b); err != nil {
			return err
		}
	}
	return nil
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
