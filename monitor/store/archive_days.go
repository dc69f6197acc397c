package store

import (
	"tailbell/monitor"

	bolt "go.etcd.io/bbolt"
)

// letGone says what of the archive was let go. It is part of the head.
type letGone struct {
	// Before is when the archive begins: slots that began before are let go, whole
	// days (UTC). Slots counts them, and First is when the earliest day of theirs
	// began; the same as Before while there were none.
	Before monitor.Instant `json:"before"`
	First  monitor.Instant `json:"first"`
	Slots  uint64          `json:"slots"`
}

// count counts slots of a day that are let go.
func (g *letGone) count(day int64, slots uint64) {
	if slots > 0 {
		g.Slots, g.First = g.Slots+slots, min(g.First, dayBegins(day))
	}
}

// removedParts bounds how many parts of days that were let go a commit removes,
// and those of a day more. Only tests set it.
var removedParts uint64 = 4096

// letGo moves on the day with which the archive begins. What lies before it counts
// as gone at once, and nobody sees it any more; it is removed in this commit and, if
// there is much of it, in those that follow.
func letGo(tx *bolt.Tx, h *head, from *monitor.Instant) error {
	if from == nil && h.LetGo == nil {
		return nil
	}
	days, ok := daysShelf.optional(tx)
	if from != nil && (h.LetGo == nil || *from > h.LetGo.Before) {
		begin := dayBegins(dayOf(*from))
		if h.LetGo == nil {
			h.LetGo = &letGone{Before: monitor.Beginning, First: begin}
		}
		if ok {
			if err := days.countGone(h, dayOf(h.LetGo.Before), dayOf(begin)); err != nil {
				return err
			}
		}
		if h.LetGo.Before = begin; h.LetGo.Slots == 0 {
			h.LetGo.First = begin
		}
	}
	if !ok {
		return nil
	}
	return days.removeGone(tx, h)
}

// countGone counts the slots of days, the last one not included, as let go.
func (r rack) countGone(h *head, from, to int64) error {
	c := r.Cursor()
	for key, value := c.Seek(generationKey(from)); key != nil; key, value = c.Next() {
		if len(key) != 8 {
			return r.damaged(key, "the key is none of a day")
		}
		day := generationOf(key)
		if day >= to {
			return nil
		}
		var t tally
		if err := r.openJSON(key, value, &t); err != nil {
			return err
		}
		h.LetGo.count(day, t.Slots)
		h.ArchiveParts, h.Archived = h.ArchiveParts-t.Parts, h.Archived-t.Slots
	}
	return nil
}

// removeGone removes days that were let go.
func (r rack) removeGone(tx *bolt.Tx, h *head) error {
	var gone [][]byte
	var parts uint64
	c := r.Cursor()
	for key, value := c.First(); key != nil && parts < removedParts; key, value = c.Next() {
		if len(key) != 8 || generationOf(key) >= dayOf(h.LetGo.Before) {
			break
		}
		var t tally
		if err := r.openJSON(key, value, &t); err != nil {
			return err
		}
		gone, parts = append(gone, append([]byte(nil), key...)), parts+t.Parts
	}
	if len(gone) == 0 {
		return nil
	}
	archive, err := archiveShelf.in(tx)
	if err != nil {
		return err
	}
	for _, key := range gone {
		if archive.day(key) == nil {
			return archive.damaged(key, "the day's bucket is missing")
		}
		if err := archive.DeleteBucket(key); err != nil {
			return archive.damaged(key, err.Error())
		}
	}
	return r.remove(gone...)
}

// Archive says what is kept of the archived slots, and what was let go.
type Archive struct {
	Slots uint64 `json:"slots"` // kept
	// From is when the archive begins, nil if all is kept; LetGo counts the slots
	// that began before, on days from First on.
	From  *monitor.Instant `json:"from,omitempty"`
	LetGo uint64           `json:"let_go,omitempty"`
	First monitor.Instant  `json:"first,omitempty"`
}

func (h *head) archive() Archive {
	a := Archive{Slots: h.Archived}
	if g := h.LetGo; g != nil {
		from := g.Before
		a.From, a.LetGo, a.First = &from, g.Slots, g.First
	}
	return a
}

// Archive returns what is kept of the archived slots, and what was let go.
func (s *Store) Archive() (Archive, error) {
	var a Archive
	err := s.view(func(tx *bolt.Tx) error {
		h, err := readHead(tx)
		a = h.archive()
		return err
	})
	return a, err
}
