package store

import (
	"encoding/binary"
	"fmt"

	"tailbell/monitor"

	bolt "go.etcd.io/bbolt"
)

// Archived slots are appended as they come, many to a value. Those that began on
// one day (UTC) lie in a bucket of their own within the bucket archive, so that a
// day is let go whole. The key in it is the commit's number (8 bytes) and the part
// (4 bytes); a part is
//
//	(series number | start | length | data)*
//
// with varints, the start's being signed. The bucket days, made with the first of
// them, says beside it how many parts and slots there must be.
//
// Stores from before days were kept apart have parts under such keys in the bucket
// archive itself; they move to their days bit by bit.

var daysShelf = newShelf("days")

// tally counts parts of the archive, and the slots in them.
type tally struct {
	Parts uint64 `json:"parts"`
	Slots uint64 `json:"slots"`
}

// dayLength is a day of UTC, which has no leap seconds here.
const dayLength = 24 * 60 * 60 * 1_000_000

// dayOf is the number of the day of an instant, from 1970 on.
func dayOf(at monitor.Instant) int64 {
	day := int64(at) / dayLength
	if int64(at)%dayLength < 0 {
		day--
	}
	return day
}

// dayBegins is when a day begins.
func dayBegins(day int64) monitor.Instant { return monitor.Instant(day * dayLength) }

// dayShelf is the shelf of one day: its checksums cover the day.
func dayShelf(day int64) shelf { return newShelf(fmt.Sprintf("archive/%d", day)) }

// day returns the bucket of a day, nil if there is none.
func (r rack) day(key []byte) *rack {
	b := r.Bucket.Bucket(key)
	if b == nil {
		return nil
	}
	b.FillPercent = appendFill
	return &rack{Bucket: b, shelf: dayShelf(generationOf(key))}
}

// writeArchive appends slots that left the engine's memory, and lets go of what
// began before the archive does.
func writeArchive(tx *bolt.Tx, h *head, changes *monitor.Changes) error {
	if err := letGo(tx, h, changes.ArchiveFrom); err != nil {
		return err
	}
	if err := moveOldParts(tx, h); err != nil {
		return err
	}
	return shelve(tx, h, h.Commit, 0, changes.Archived)
}

// shelve appends slots to their days, under the keys of a commit from a part on.
func shelve(tx *bolt.Tx, h *head, commit uint64, part uint32, slots []monitor.ArchivedSlot) error {
	var days []*dayPart
	byDay := map[int64]*dayPart{}
	for _, slot := range slots {
		day := dayOf(slot.Start)
		if h.LetGo != nil && day < dayOf(h.LetGo.Before) {
			h.LetGo.count(day, 1)
			continue
		}
		p := byDay[day]
		if p == nil {
			p = &dayPart{day: day, commit: commit, part: part}
			byDay[day] = p
			days = append(days, p)
		}
		if p.add(slot); len(p.payload) >= partSize {
			if err := p.put(tx, h); err != nil {
				return err
			}
		}
	}
	for _, p := range days {
		if err := p.put(tx, h); err != nil {
			return err
		}
	}
	return nil
}

// dayPart is a part under construction of one day.
type dayPart struct {
	day     int64
	commit  uint64
	part    uint32
	payload []byte
	slots   uint64
}

func (p *dayPart) add(slot monitor.ArchivedSlot) {
	p.payload = binary.AppendUvarint(p.payload, uint64(slot.Number))
	p.payload = binary.AppendVarint(p.payload, int64(slot.Start))
	p.payload = binary.AppendUvarint(p.payload, uint64(len(slot.Data)))
	p.payload = append(p.payload, slot.Data...)
	p.slots++
}

// put writes the part, unless it is empty, and begins the next one.
func (p *dayPart) put(tx *bolt.Tx, h *head) error {
	if p.slots == 0 {
		return nil
	}
	r, err := archiveShelf.in(tx)
	if err != nil {
		return err
	}
	days, err := daysShelf.made(tx)
	if err != nil {
		return err
	}
	key := generationKey(p.day)
	var t tally
	known, err := days.getJSON(key, &t)
	if err != nil {
		return err
	}
	if !known {
		if _, err := r.CreateBucket(key); err != nil {
			return fmt.Errorf("archive, day %d: %w", p.day, err)
		}
	}
	d := r.day(key)
	if d == nil {
		return r.damaged(key, "the day's bucket is missing")
	}
	if err := d.put(journalKey(p.commit, p.part), p.payload); err != nil {
		return err
	}
	t.Parts, t.Slots = t.Parts+1, t.Slots+p.slots
	h.ArchiveParts, h.Archived = h.ArchiveParts+1, h.Archived+p.slots
	p.payload, p.slots, p.part = p.payload[:0], 0, p.part+1
	return days.putJSON(key, t)
}

// movedBytes bounds what of an old layout a commit moves, and part more.
const movedBytes = 4 << 20

// moveOldParts moves parts from before days were kept apart to their days.
func moveOldParts(tx *bolt.Tx, h *head) error {
	r, err := archiveShelf.in(tx)
	if err != nil {
		return err
	}
	type oldPart struct {
		key   []byte
		slots []monitor.ArchivedSlot
	}
	var old []oldPart
	c, size := r.Cursor(), 0
	for key, value := c.First(); value != nil && size < movedBytes; key, value = c.Next() {
		slots, err := r.archived(key, value)
		if err != nil {
			return err
		}
		if len(key) != 12 {
			return r.damaged(key, "the key is none of a part")
		}
		old, size = append(old, oldPart{append([]byte(nil), key...), slots}), size+len(value)
	}
	for _, p := range old {
		if err := r.remove(p.key); err != nil {
			return err
		}
		h.ArchiveParts, h.Archived = h.ArchiveParts-1, h.Archived-uint64(len(p.slots))
		if err := shelve(tx, h, binary.BigEndian.Uint64(p.key), binary.BigEndian.Uint32(p.key[8:]), p.slots); err != nil {
			return err
		}
	}
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
