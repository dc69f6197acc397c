package store

import (
	"fmt"

	"tailbell/monitor"

	bolt "go.etcd.io/bbolt"
)

// readSeries returns the last whole state of every series with the patches kept
// that came after it, oldest first.
func readSeries(tx *bolt.Tx, h *head) ([]monitor.SeriesImage, error) {
	series := make([]monitor.SeriesImage, h.Series)
	written, err := readStates(tx, h, series)
	if err != nil {
		return nil, err
	}
	return series, readPatches(tx, h, series, written)
}

// readStates fills in the states, and returns the commits with which they were
// written, 0 where there is none. The state holds all that the patches of that
// commit say, and those before it.
func readStates(tx *bolt.Tx, h *head, series []monitor.SeriesImage) (written []uint64, err error) {
	r, err := statesShelf.in(tx)
	if err != nil {
		return nil, err
	}
	states, copies := uint32(0), copier{}
	written = make([]uint64, len(series))
	err = r.ForEach(func(key, value []byte) error {
		n, commit, data, err := r.state(key, value)
		if err != nil {
			return err
		}
		if n >= h.Series {
			return r.damaged(key, fmt.Sprintf("there are %d series", h.Series))
		}
		series[n].State, written[n] = copies.of(data), commit
		states++
		return nil
	})
	if err == nil && states != h.States {
		err = r.damaged(nil, fmt.Sprintf("%d states instead of %d", states, h.States))
	}
	return written, err
}

// patch is one of the journal.
type patch struct {
	series uint32
	data   []byte
}

// readPatches fills in the patches of commits after those with which the states
// were written.
func readPatches(tx *bolt.Tx, h *head, series []monitor.SeriesImage, written []uint64) error {
	var all []patch
	copies, counts := copier{}, make([]uint32, len(series))
	err := eachPart(tx, h, func(key []byte, p part) error {
		stray := false
		err := p.each(func(n uint32, data []byte) {
			switch {
			case n >= h.Series:
				stray = true
			case p.commit > written[n]:
				all = append(all, patch{n, copies.of(data)})
				counts[n]++
			}
		})
		if err == nil && stray {
			err = journalShelf.damaged(key, fmt.Sprintf("there are %d series", h.Series))
		}
		return err
	})
	if err != nil {
		return err
	}
	lists := make([][]byte, len(all))
	for n, count := range counts {
		if count > 0 {
			series[n].Patches, lists = lists[:0:count], lists[count:]
		}
	}
	for _, p := range all {
		series[p.series].Patches = append(series[p.series].Patches, p.data)
	}
	return nil
}

// copier copies what lies in a transaction's memory, many pieces to a block.
type copier struct{ block []byte }

const copierBlock = 1 << 20

// of returns a copy, which is not nil.
func (c *copier) of(data []byte) []byte {
	if c.block == nil || len(c.block) < len(data) {
		if len(data) > copierBlock/4 {
			return append([]byte{}, data...)
		}
		c.block = make([]byte, copierBlock)
	}
	n := copy(c.block, data)
	piece := c.block[:n:n]
	c.block = c.block[n:]
	return piece
}
