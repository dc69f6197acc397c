package store

import (
	"bytes"
	"errors"
	"fmt"
	"slices"
	"syscall"
	"testing"

	"tailbell/monitor"
)

func TestCommitMovesForward(t *testing.T) {
	s := create(t, Options{})
	mustCommit(t, s, monitor.Changes{Position: 10}, Mark{Position: 10})
	for _, position := range []uint64{1, 9, 10} {
		if err := s.Commit(monitor.Changes{Position: position, Header: []byte("x")}, Mark{}); !errors.Is(err, ErrPosition) {
			t.Errorf("position %d gave %v, want ErrPosition", position, err)
		}
	}
	if err := s.Commit(monitor.Changes{Position: 11}, Mark{Position: 12}); !errors.Is(err, ErrPosition) {
		t.Errorf("a mark of another position gave %v, want ErrPosition", err)
	}
	if err := s.Commit(monitor.Changes{}, Mark{Position: 12}); err != nil {
		t.Errorf("no changes gave %v", err)
	}
	if err := s.Commit(monitor.Changes{Header: []byte("set")}, Mark{}); err != nil {
		t.Errorf("changes without a position gave %v", err)
	}
	snap, err := s.Snapshot()
	if err != nil || snap.Position != 10 || string(snap.Header) != "set" {
		t.Errorf("Snapshot gave %+v, %v", snap, err)
	}
}

func TestCommitKeepsOrder(t *testing.T) {
	patch := func(numbers ...uint32) []monitor.SeriesChange {
		var list []monitor.SeriesChange
		for _, n := range numbers {
			list = append(list, monitor.SeriesChange{Number: n, Data: []byte{1}})
		}
		return list
	}
	s := create(t, Options{})
	mustCommit(t, s, monitor.Changes{Position: 1, Series: patch(0, 1, 3), States: patch(2), Cycle: 4}, Mark{})
	for name, c := range map[string]monitor.Changes{
		"a gap":            {Series: patch(5)},
		"falling":          {Series: patch(2, 1)},
		"twice":            {States: patch(1, 1), Cycle: 4},
		"a round too old":  {States: patch(1), Cycle: 3},
		"a gap, in states": {States: patch(5), Cycle: 4},
	} {
		c.Position = 2
		if err := s.Commit(c, Mark{}); !errors.Is(err, ErrOrder) {
			t.Errorf("%s gave %v, want ErrOrder", name, err)
		}
	}
	mustCommit(t, s, monitor.Changes{Position: 2, Series: patch(4)}, Mark{})
}

func TestLargeValuesAreSplit(t *testing.T) {
	s := create(t, Options{})
	var changes monitor.Changes
	changes.Position = 1
	changes.Header = bytes.Repeat([]byte("header"), 500_000)
	for n := range uint32(7) {
		changes.Series = append(changes.Series, monitor.SeriesChange{Number: n, Data: bytes.Repeat([]byte{byte(n)}, 400_000)})
		changes.IDs = append(changes.IDs, monitor.IDChange{Generation: int64(n % 2), Value: bytes.Repeat([]byte{byte(n)}, 600_000)})
		changes.Archived = append(changes.Archived, monitor.ArchivedSlot{Number: n, Start: -5, Data: bytes.Repeat([]byte{byte(n)}, 600_000)})
	}
	mustCommit(t, s, changes, Mark{})
	s = reopen(t, s)
	snap, err := s.Snapshot()
	if err != nil {
		t.Fatal(err)
	}
	if !bytes.Equal(snap.Header, changes.Header) {
		t.Error("the header differs")
	}
	for n, image := range snap.Series {
		if len(image.Patches) != 1 || !bytes.Equal(image.Patches[0], changes.Series[n].Data) {
			t.Errorf("series %d differs", n)
		}
	}
	if !slices.EqualFunc(snap.IDs, changes.IDs, func(a, b monitor.IDChange) bool {
		return a.Generation == b.Generation && bytes.Equal(a.Value, b.Value)
	}) {
		t.Error("the ids differ")
	}
	var slots int
	if err := s.Archived(func(slot monitor.ArchivedSlot) error {
		if want := changes.Archived[slots]; slot.Number != want.Number || slot.Start != want.Start || !bytes.Equal(slot.Data, want.Data) {
			t.Errorf("slot %d differs", slots)
		}
		slots++
		return nil
	}); err != nil || slots != 7 {
		t.Errorf("%d slots, %v", slots, err)
	}
	mustCommit(t, s, monitor.Changes{Position: 2, Header: []byte("short")}, Mark{})
	if snap, err := s.Snapshot(); err != nil || string(snap.Header) != "short" {
		t.Errorf("a shorter header: %d bytes, %v", len(snap.Header), err)
	}
}

func TestNoRoom(t *testing.T) {
	s := create(t, Options{MaxBytes: 1 << 20})
	mustCommit(t, s, monitor.Changes{Position: 1, Header: []byte("before")}, Mark{})
	big := monitor.Changes{Position: 2, Header: bytes.Repeat([]byte("x"), 20<<20)}
	if err := s.Commit(big, Mark{}); !errors.Is(err, ErrFull) {
		t.Fatalf("gave %v, want ErrFull", err)
	}
	snap, err := s.Snapshot()
	if err != nil || snap.Position != 1 || string(snap.Header) != "before" {
		t.Errorf("something of it was stored: position %d, %v", snap.Position, err)
	}
	s.db.MaxSize = 0
	mustCommit(t, s, big, Mark{})
}

// TestFaults lets every step of a commit fail in turn, and compares what the
// file then holds with what the error said.
func TestFaults(t *testing.T) {
	for name, c := range map[string]struct {
		step   string
		cause  error
		want   error
		stored bool
		again  bool
	}{
		"at the beginning":     {"commit", errors.New("broken"), nil, false, true},
		"written, not durable": {"commit written", errors.New("broken"), nil, false, true},
		"disk full":            {"commit written", syscall.ENOSPC, ErrFull, false, true},
		"durable, no answer":   {"commit durable", errors.New("broken"), ErrFailed, true, false},
	} {
		t.Run(name, func(t *testing.T) {
			s := create(t, Options{})
			mustCommit(t, s, monitor.Changes{Position: 1}, Mark{})
			s.fault = func(step string) error {
				if step == c.step {
					return c.cause
				}
				return nil
			}
			err := s.Commit(monitor.Changes{Position: 2}, Mark{})
			if !errors.Is(err, c.cause) || (c.want != nil && !errors.Is(err, c.want)) {
				t.Errorf("gave %v, want %v and %v", err, c.cause, c.want)
			}
			s.fault = nil
			err = s.Commit(monitor.Changes{Position: 3}, Mark{})
			if c.again != (err == nil) || (!c.again && !errors.Is(err, ErrFailed)) {
				t.Errorf("the next commit gave %v", err)
			}
			s = reopen(t, s)
			want := uint64(3) // the failed one left nothing, the next one holds
			if c.stored {
				want = 2
			}
			if position, err := s.Position(); err != nil || position != want {
				t.Errorf("the file stands at %d, %v; want %d", position, err, want)
			}
		})
	}
}

func TestMarksThinOut(t *testing.T) {
	s := create(t, Options{})
	position := uint64(0)
	for i := range 3000 {
		position += uint64(1 + i%7*(i%13))
		mustCommit(t, s, monitor.Changes{Position: position}, Mark{
			Position: position, Digest: [32]byte{byte(i), byte(i >> 8)}, Stored: monitor.Instant(i),
		})
		if i%500 != 499 {
			continue
		}
		marks, err := s.Marks()
		if err != nil {
			t.Fatal(err)
		}
		if len(marks) > nearMarks+2*20 {
			t.Errorf("after %d commits %d marks are kept", i+1, len(marks))
		}
		if marks[0].Position != position || marks[0].Digest != [32]byte{byte(i), byte(i >> 8)} || marks[0].Stored != monitor.Instant(i) {
			t.Errorf("the newest mark is %v", marks[0])
		}
		if marks[len(marks)-1].Position != 1 {
			t.Errorf("the oldest mark is %v", marks[len(marks)-1])
		}
		for j := nearMarks; j+1 < len(marks); j++ {
			newer, older := position-marks[j].Position, position-marks[j+1].Position
			if older > 2*newer+100 {
				t.Errorf("after %d commits a gap from %d to %d back", i+1, newer, older)
			}
		}
	}
}

func TestSettings(t *testing.T) {
	s := create(t, Options{})
	one := &monitor.SettingChange{Version: 1, Digest: "aa", Text: []byte("one")}
	two := &monitor.SettingChange{Version: 2, Digest: "bb", Text: []byte("two")}
	for i, setting := range []*monitor.SettingChange{one, two, one} {
		mustCommit(t, s, monitor.Changes{Position: uint64(i + 1), Settings: []monitor.SettingChange{*setting}}, Mark{})
	}
	other := &monitor.SettingChange{Version: 2, Digest: "cc", Text: []byte("other")}
	if err := s.Commit(monitor.Changes{Position: 9, Settings: []monitor.SettingChange{*other}}, Mark{}); !errors.Is(err, ErrOrder) {
		t.Errorf("another text of version 2 gave %v, want ErrOrder", err)
	}
	settings, err := s.Settings()
	if got := fmt.Sprint(settings); err != nil || got != fmt.Sprint([]monitor.SettingChange{*one, *two}) {
		t.Errorf("Settings gave %s, %v", got, err)
	}
}

// TestJournalIsTrimmed: what the checkpoint has passed twice is cut off, a
// bounded number of keys at a time, and the file stops growing.
func TestJournalIsTrimmed(t *testing.T) {
	s := create(t, Options{})
	state := []monitor.SeriesChange{{Number: 0, Data: []byte("s")}}
	for position := uint64(1); position <= 1000; position++ {
		mustCommit(t, s, monitor.Changes{Position: position, Series: state}, Mark{})
	}
	expect := func(when string, first uint64) {
		t.Helper()
		if report, err := s.Check(t.Context()); err != nil || report.JournalFirst != first {
			t.Errorf("%s the journal begins at %d, %v; want %d", when, report.JournalFirst, err, first)
		}
	}
	expect("before a checkpoint", 1)
	mustCommit(t, s, monitor.Changes{Position: 1001, States: state, Cycle: 1}, Mark{})
	expect("in the first round", 1)
	mustCommit(t, s, monitor.Changes{Position: 1002, States: state, Cycle: 2}, Mark{})
	expect("in the second round", 1+trimKeys)
	mustCommit(t, s, monitor.Changes{Position: 1003}, Mark{})
	expect("after another commit", 1001)
	var size int64
	for position := uint64(1004); position <= 3000; position++ {
		mustCommit(t, s, monitor.Changes{
			Position: position, Series: []monitor.SeriesChange{{Number: 0, Data: make([]byte, 10_000)}},
			States: state, Cycle: position,
		}, Mark{})
		if position == 1100 {
			_, info := contents(t, s.path)
			size = info.Size()
		}
	}
	expect("in the end", 2999)
	if _, info := contents(t, s.path); info.Size() > size {
		t.Errorf("the file grew from %d to %d bytes", size, info.Size())
	}
}

// TestHalfAnEntryTrimmed: an entry of many parts may be cut off in the middle.
func TestHalfAnEntryTrimmed(t *testing.T) {
	s := create(t, Options{})
	var big []monitor.SeriesChange
	for n := range uint32(3) {
		big = append(big, monitor.SeriesChange{Number: n, Data: make([]byte, partSize)})
	}
	for position := uint64(1); position < trimKeys; position++ {
		mustCommit(t, s, monitor.Changes{Position: position, Series: []monitor.SeriesChange{{Number: 0}}}, Mark{})
	}
	mustCommit(t, s, monitor.Changes{Position: 1000, Series: big}, Mark{})
	states := []monitor.SeriesChange{{Number: 0}, {Number: 1}} // the last one's patch still counts
	mustCommit(t, s, monitor.Changes{Position: 1001, States: states, Cycle: 2}, Mark{})
	s = reopen(t, s)
	snap, err := s.Snapshot()
	if err != nil || len(snap.Series[0].Patches) != 0 || len(snap.Series[2].Patches) != 1 {
		t.Errorf("Snapshot: %d patches of the first, %d of the last, %v", len(snap.Series[0].Patches), len(snap.Series[2].Patches), err)
	}
}

// TestPatchesAfterTheState: a state holds what the patches of its own commit say,
// and those before it: only later ones are laid over it.
func TestPatchesAfterTheState(t *testing.T) {
	s := create(t, Options{})
	say := func(text string) []monitor.SeriesChange { return []monitor.SeriesChange{{Data: []byte(text)}} }
	mustCommit(t, s, monitor.Changes{Position: 1, Series: say("one")}, Mark{})
	mustCommit(t, s, monitor.Changes{Position: 2, Series: say("two"), States: say("whole")}, Mark{})
	mustCommit(t, s, monitor.Changes{Position: 3, Series: say("three")}, Mark{})
	mustCommit(t, s, monitor.Changes{Position: 4, Series: say("four")}, Mark{})
	s = reopen(t, s)
	snap, err := s.Snapshot()
	if err != nil {
		t.Fatal(err)
	}
	image := snap.Series[0]
	if got := fmt.Sprintf("%s %s", image.State, image.Patches); got != "whole [three four]" {
		t.Errorf("Snapshot: %s", got)
	}
}
