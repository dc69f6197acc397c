package store

import (
	"encoding/binary"
	"fmt"

	"tailbell/monitor"

	bolt "go.etcd.io/bbolt"
)

// partSize is about how large a value of the journal, the ids or the header
// becomes before another one is begun.
const partSize = 1 << 20

// trimKeys bounds how many keys a commit cuts off the journal, or a delivery
// off the outbox.
const trimKeys = 512

// A journal entry holds the patches of one commit. Its key is the commit's
// number (8 bytes) and the part (4 bytes), from 0; a part is
//
//	cycle | position | parts | (series number | length | data)*
//
// with unsigned varints.

// writeJournal appends a commit's patches under its number.
func writeJournal(tx *bolt.Tx, h *head, changes *monitor.Changes) error {
	r, err := journalShelf.in(tx)
	if err != nil {
		return err
	}
	cuts := journalCuts(changes.Series)
	for part, from := range cuts[:len(cuts)-1] {
		patches := changes.Series[from:cuts[part+1]]
		b := append(make([]byte, 0, journalSize(patches)), frameVersion)
		b = binary.AppendUvarint(b, h.Cycle)
		b = binary.AppendUvarint(b, h.Position)
		b = binary.AppendUvarint(b, uint64(len(cuts)-1))
		for _, c := range patches {
			b = binary.AppendUvarint(b, uint64(c.Number))
			b = binary.AppendUvarint(b, uint64(len(c.Data)))
			b = append(b, c.Data...)
		}
		if err := r.putFramed(journalKey(h.Commit, uint32(part)), b); err != nil {
			return err
		}
	}
	return trimJournal(r, h)
}

// journalSize is the most bytes that the value of the patches takes.
func journalSize(patches []monitor.SeriesChange) int {
	size := frameOverhead + 3*binary.MaxVarintLen64
	for i := range patches {
		size += len(patches[i].Data) + 2*binary.MaxVarintLen32
	}
	return size
}

// journalCuts returns where the parts of an entry begin, and the end.
func journalCuts(patches []monitor.SeriesChange) []int {
	cuts, size := []int{0}, 0
	for i, c := range patches {
		if size > 0 && size+len(c.Data) > partSize {
			cuts, size = append(cuts, i), 0
		}
		size += len(c.Data) + 8
	}
	return append(cuts, len(patches))
}

func journalKey(commit uint64, part uint32) []byte {
	return binary.BigEndian.AppendUint32(number(commit), part)
}

// trimJournal cuts off entries that the checkpoint has passed twice.
func trimJournal(r rack, h *head) error {
	var gone [][]byte
	c := r.Cursor()
	for key, value := c.First(); key != nil && len(gone) < trimKeys; key, value = c.Next() {
		part, err := r.part(key, value)
		if err != nil {
			return err
		}
		if part.cycle+2 > h.Cycle {
			break
		}
		gone = append(gone, append([]byte(nil), key...))
		h.JournalFirst = part.commit
		if part.part+1 == part.parts {
			h.JournalFirst++
		}
	}
	return r.remove(gone...)
}

// part is one value of the journal.
type part struct {
	commit          uint64
	part            uint32
	cycle, position uint64
	parts           uint32
	patches         []byte
}

func (r rack) part(key, value []byte) (part, error) {
	var p part
	payload, err := r.open(key, value)
	if err != nil {
		return p, err
	}
	if len(key) != 12 {
		return p, r.damaged(key, "the key is no journal key")
	}
	p.commit, p.part = binary.BigEndian.Uint64(key), binary.BigEndian.Uint32(key[8:])
	f := fields{rest: payload}
	p.cycle, p.position, p.parts = f.uvarint(), f.uvarint(), uint32(f.uvarint())
	p.patches = f.rest
	if f.bad || p.part >= p.parts {
		return p, r.damaged(key, "its beginning makes no sense")
	}
	return p, nil
}

// each calls f for every patch; the data share the transaction's memory.
func (p part) each(use func(number uint32, data []byte)) error {
	f := fields{rest: p.patches}
	for len(f.rest) > 0 {
		n := f.uvarint()
		data := f.bytes(f.uvarint())
		if f.bad || n >= 1<<32 {
			return journalShelf.damaged(journalKey(p.commit, p.part), "a patch makes no sense")
		}
		use(uint32(n), data)
	}
	return nil
}

// eachPart calls use for the parts of all entries in order, and checks that
// none is missing.
func eachPart(tx *bolt.Tx, h *head, use func(key []byte, p part) error) error {
	r, err := journalShelf.in(tx)
	if err != nil {
		return err
	}
	next, nextPart, first := h.JournalFirst, uint32(0), true
	c := r.Cursor()
	for key, value := c.First(); key != nil; key, value = c.Next() {
		p, err := r.part(key, value)
		if err != nil {
			return err
		}
		if first {
			nextPart = p.part // an entry may have been cut off in the middle
			first = false
		}
		if p.commit != next || p.part != nextPart {
			return r.damaged(key, fmt.Sprintf("expected was %d.%d", next, nextPart))
		}
		if err := use(key, p); err != nil {
			return err
		}
		if nextPart++; nextPart == p.parts {
			next, nextPart = next+1, 0
		}
	}
	if next != h.Commit+1 || nextPart != 0 {
		return r.damaged(journalKey(next, nextPart), "it is missing")
	}
	return nil
}
