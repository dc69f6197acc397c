package store

import (
	"encoding/binary"
	"fmt"
	"math/rand/v2"
	"os"
	"slices"
	"testing"

	"tailbell/monitor"

	bolt "go.etcd.io/bbolt"
)

var oneSeries = []monitor.SeriesChange{{Number: 0, Data: []byte("{}")}}

// slotsOf makes slots of one day.
func slotsOf(day int64, n int, size int) []monitor.ArchivedSlot {
	var slots []monitor.ArchivedSlot
	for i := range n {
		data := make([]byte, size)
		copy(data, fmt.Sprintf("day %d, slot %d", day, i))
		slots = append(slots, monitor.ArchivedSlot{Start: dayBegins(day) + monitor.Instant(i), Data: data})
	}
	return slots
}

func archivedOf(t *testing.T, s *Store) (slots []monitor.ArchivedSlot) {
	t.Helper()
	if err := s.Archived(func(slot monitor.ArchivedSlot) error {
		slots = append(slots, slot)
		return nil
	}); err != nil {
		t.Fatal(err)
	}
	return slots
}

func archiveOf(t *testing.T, s *Store) Archive {
	t.Helper()
	a, err := s.Archive()
	if err != nil {
		t.Fatal(err)
	}
	return a
}

// A file in which a day comes and another goes stops growing.
func TestArchiveUsesPagesAgain(t *testing.T) {
	s := create(t, Options{})
	mustCommit(t, s, monitor.Changes{Position: 1, Series: oneSeries}, Mark{})
	var sizes []int64
	for day := range int64(40) {
		from := dayBegins(day - 9)
		for part := range uint64(4) {
			mustCommit(t, s, monitor.Changes{Position: 2 + 4*uint64(day) + part, Archived: slotsOf(day, 500, 150), ArchiveFrom: &from}, Mark{})
		}
		info, err := os.Stat(s.path)
		if err != nil {
			t.Fatal(err)
		}
		sizes = append(sizes, info.Size())
	}
	if sizes[39] > sizes[19]*5/4 { // else it would have doubled
		t.Errorf("the file grew from %d to %d bytes in 20 days of which each takes the place of another", sizes[19], sizes[39])
	}
	a := archiveOf(t, s)
	if a.Slots != 10*2000 || a.LetGo != 30*2000 || a.First != 0 || *a.From != dayBegins(30) {
		t.Errorf("%+v, begins %v", a, *a.From)
	}
	if slots := archivedOf(t, s); len(slots) != 10*2000 || slots[0].Start != dayBegins(30) {
		t.Errorf("%d slots", len(slots))
	}
}

// What is let go at once is removed little by little, and seen by nobody meanwhile.
func TestArchiveIsRemovedLittleByLittle(t *testing.T) {
	s := create(t, Options{})
	mustCommit(t, s, monitor.Changes{Position: 1, Series: oneSeries}, Mark{})
	position := uint64(1)
	for day := range int64(6) {
		for range 3 {
			var slots []monitor.ArchivedSlot
			for range 500 {
				slots = append(slots, slotsOf(day, 1, 1200)...)
			}
			position++
			mustCommit(t, s, monitor.Changes{Position: position, Archived: slots}, Mark{})
		}
	}
	before := removedParts
	defer func() { removedParts = before }()
	removedParts = 4
	from := dayBegins(5)
	position++
	mustCommit(t, s, monitor.Changes{Position: position, ArchiveFrom: &from}, Mark{})
	if a, left := archiveOf(t, s), daysIn(t, s); a.Slots != 1500 || a.LetGo != 5*1500 || left <= 1 || len(archivedOf(t, s)) != 1500 {
		t.Errorf("after the first commit: %+v, %d days in the file, %d slots read", a, left, len(archivedOf(t, s)))
	}
	s = reopen(t, s)
	for range 4 {
		position++
		mustCommit(t, s, monitor.Changes{Position: position, ArchiveFrom: &from}, Mark{})
	}
	if a, left := archiveOf(t, s), daysIn(t, s); a.Slots != 1500 || a.LetGo != 5*1500 || left != 1 {
		t.Errorf("at the end: %+v, %d days in the file", a, left)
	}
	position++ // what is late for the archive is counted, too
	mustCommit(t, s, monitor.Changes{Position: position, Archived: slotsOf(-7, 3, 10), ArchiveFrom: &from}, Mark{})
	if a := archiveOf(t, s); a.Slots != 1500 || a.LetGo != 5*1500+3 || a.First != dayBegins(-7) {
		t.Errorf("with late ones: %+v", a)
	}
}

// daysIn counts the days that lie in the file.
func daysIn(t *testing.T, s *Store) (n int) {
	t.Helper()
	if err := s.view(func(tx *bolt.Tx) error {
		r, err := archiveShelf.in(tx)
		if err != nil {
			return err
		}
		return r.ForEach(func(_, _ []byte) error { n++; return nil })
	}); err != nil {
		t.Fatal(err)
	}
	return n
}

// A store from before days were kept apart is sound, is read whole, and moves what
// it has to its days.
func TestArchiveWithoutDays(t *testing.T) {
	s := create(t, Options{})
	mustCommit(t, s, monitor.Changes{Position: 1, Series: oneSeries}, Mark{})
	random := rand.New(rand.NewPCG(20261201, 3))
	var want []monitor.ArchivedSlot
	for commit := range uint64(30) {
		var part []byte
		slots := slotsOf(random.Int64N(50)-20, 1+random.IntN(40), 300)
		slots = append(slots, slotsOf(random.Int64N(50)-20, 500, 500)...)
		for _, slot := range slots {
			part = binary.AppendUvarint(part, uint64(slot.Number))
			part = binary.AppendVarint(part, int64(slot.Start))
			part = binary.AppendUvarint(part, uint64(len(slot.Data)))
			part = append(part, slot.Data...)
		}
		if err := s.update("edit", func(tx *bolt.Tx, h *head) error {
			r, err := archiveShelf.in(tx)
			if err != nil {
				return err
			}
			h.Archived, h.ArchiveParts = h.Archived+uint64(len(slots)), h.ArchiveParts+1
			return r.put(journalKey(commit, 0), part)
		}); err != nil {
			t.Fatal(err)
		}
		want = append(want, slots...)
	}
	same := func() {
		t.Helper()
		have := archivedOf(t, s)
		for _, list := range [][]monitor.ArchivedSlot{have, want} {
			slices.SortStableFunc(list, func(a, b monitor.ArchivedSlot) int { return int(dayOf(a.Start) - dayOf(b.Start)) })
		}
		if err := differ("archived", have, want); err != nil {
			t.Fatal(err)
		}
		if a := archiveOf(t, s); a.Slots != uint64(len(want)) {
			t.Fatalf("%+v, want %d", a, len(want))
		}
	}
	same()
	s = reopen(t, s)
	mustCommit(t, s, monitor.Changes{Position: 2}, Mark{}) // nothing: nothing is written
	mustCommit(t, s, monitor.Changes{Position: 3, Header: []byte("x")}, Mark{})
	same() // half of it has moved
	s = reopen(t, s)
	from := dayBegins(3)
	before := len(want)
	want = slices.DeleteFunc(want, func(slot monitor.ArchivedSlot) bool { return slot.Start < from })
	for position := range uint64(4) {
		mustCommit(t, s, monitor.Changes{Position: 4 + position, Header: []byte("x"), ArchiveFrom: &from}, Mark{})
	}
	same()
	if a := archiveOf(t, s); a.LetGo != uint64(before-len(want)) {
		t.Errorf("%+v, want %d let go", a, before-len(want))
	}
}
