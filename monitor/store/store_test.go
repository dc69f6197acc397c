package store

import (
	"bytes"
	"context"
	"errors"
	"io/fs"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"tailbell/monitor"

	bolt "go.etcd.io/bbolt"
)

var testIdentity = Identity{Deployment: "quillmere", Partition: 0, Partitions: 1, KeyParts: 1}

// quick lets tests that prove nothing about the disk run without fsync and
// in small files.
func quick(s *Store) *Store {
	s.db.NoSync, s.db.NoGrowSync, s.db.AllocSize = true, true, 1<<16
	return s
}

// create makes a store that is checked whole when the test ends.
func create(t *testing.T, opts Options) *Store {
	t.Helper()
	s, err := Create(filepath.Join(t.TempDir(), "store", "p0.db"), testIdentity, opts)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { leave(t, s) })
	return quick(s)
}

// leave checks a store whole and closes it, unless it was closed.
func leave(t *testing.T, s *Store) {
	t.Helper()
	report, err := s.Check(context.Background())
	if err != nil && !errors.Is(err, ErrClosed) {
		t.Errorf("check: %v\n%s", err, strings.Join(report.Faults, "\n"))
	}
	if err := s.Close(); err != nil {
		t.Error(err)
	}
}

// reopen closes a store and opens it again.
func reopen(t *testing.T, s *Store) *Store {
	t.Helper()
	leave(t, s)
	again, err := Open(s.path, s.identity, s.opts)
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() { leave(t, again) })
	return quick(again)
}

func mustCommit(t *testing.T, s *Store, changes monitor.Changes, mark Mark) {
	t.Helper()
	if err := s.Commit(changes, mark); err != nil {
		t.Fatal(err)
	}
}

func TestCreateMakesAPrivateFile(t *testing.T) {
	s := create(t, Options{})
	for path, want := range map[string]fs.FileMode{s.path: 0o600, filepath.Dir(s.path): 0o700} {
		info, err := os.Stat(path)
		if err != nil {
			t.Fatal(err)
		}
		if got := info.Mode().Perm(); got != want {
			t.Errorf("%s has mode %o, want %o", path, got, want)
		}
	}
	entries, err := os.ReadDir(filepath.Dir(s.path))
	if err != nil || len(entries) != 1 {
		t.Errorf("drafts were left behind: %v, %v", entries, err)
	}
	if _, err := Create(s.path, testIdentity, Options{}); !errors.Is(err, fs.ErrExist) {
		t.Errorf("a second Create gave %v, want fs.ErrExist", err)
	}
	if _, err := Create(filepath.Join(t.TempDir(), "x.db"), Identity{Deployment: "a", Partition: 1, Partitions: 1, KeyParts: 1}, Options{}); err == nil {
		t.Error("a partition outside of the partitions was taken")
	}
}

func TestCommitsAreSynced(t *testing.T) {
	s, err := Create(filepath.Join(t.TempDir(), "p0.db"), testIdentity, Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer leave(t, s)
	if s.db.NoSync || s.db.NoFreelistSync || s.db.NoGrowSync {
		t.Errorf("sync is off: NoSync %t, NoFreelistSync %t, NoGrowSync %t", s.db.NoSync, s.db.NoFreelistSync, s.db.NoGrowSync)
	}
}

func TestUseAfterClose(t *testing.T) {
	s := create(t, Options{})
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
	if err := s.Commit(monitor.Changes{Position: 1}, Mark{}); !errors.Is(err, ErrClosed) {
		t.Errorf("Commit after Close gave %v, want ErrClosed", err)
	}
	if _, err := s.Snapshot(); !errors.Is(err, ErrClosed) {
		t.Errorf("Snapshot after Close gave %v, want ErrClosed", err)
	}
	if err := s.Close(); err != nil {
		t.Errorf("a second Close gave %v", err)
	}
}

// refused opens a file that must be refused with an error, and must be the
// same afterwards, to the byte and the time of its last change.
func refused(t *testing.T, path string, id Identity, want error) {
	t.Helper()
	before, info := contents(t, path)
	_, err := Open(path, id, Options{LockWait: time.Millisecond})
	if !errors.Is(err, want) {
		t.Errorf("Open gave %v, want %v", err, want)
	} else if !strings.Contains(err.Error(), path) {
		t.Errorf("the error does not name the file: %v", err)
	}
	after, infoAfter := contents(t, path)
	if !bytes.Equal(before, after) || !info.ModTime().Equal(infoAfter.ModTime()) {
		t.Error("a refused file was touched")
	}
}

func contents(t *testing.T, path string) ([]byte, fs.FileInfo) {
	t.Helper()
	b, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	info, err := os.Stat(path)
	if err != nil {
		t.Fatal(err)
	}
	return b, info
}

func TestOpenRefusesOtherFiles(t *testing.T) {
	for name, content := range map[string]string{
		"empty":      "",
		"short":      "x",
		"text":       strings.Repeat("These are the minutes of the ward meeting.\n", 400),
		"zero pages": string(make([]byte, 4*pageSize)),
	} {
		t.Run(name, func(t *testing.T) {
			path := filepath.Join(t.TempDir(), "p0.db")
			if err := os.WriteFile(path, []byte(content), 0o600); err != nil {
				t.Fatal(err)
			}
			refused(t, path, testIdentity, ErrForeign)
		})
	}
	t.Run("folder", func(t *testing.T) {
		if _, err := Open(t.TempDir(), testIdentity, Options{}); !errors.Is(err, ErrForeign) {
			t.Errorf("Open gave %v, want ErrForeign", err)
		}
	})
	t.Run("missing", func(t *testing.T) {
		if _, err := Open(filepath.Join(t.TempDir(), "p0.db"), testIdentity, Options{}); !errors.Is(err, fs.ErrNotExist) {
			t.Errorf("Open gave %v, want fs.ErrNotExist", err)
		}
	})
	t.Run("another program's database", func(t *testing.T) {
		path := filepath.Join(t.TempDir(), "p0.db")
		editMeta(t, path, func(tx *bolt.Tx) error {
			_, err := tx.CreateBucket([]byte("recipes"))
			return err
		})
		refused(t, path, testIdentity, ErrForeign)
	})
}

// editMeta changes a file by bbolt alone.
func editMeta(t *testing.T, path string, edit func(tx *bolt.Tx) error) {
	t.Helper()
	db, err := bolt.Open(path, 0o600, nil)
	if err != nil {
		t.Fatal(err)
	}
	if err := errors.Join(db.Update(edit), db.Close()); err != nil {
		t.Fatal(err)
	}
}

func TestOpenRefusesOtherFormats(t *testing.T) {
	for name, c := range map[string]struct {
		number []byte
		want   error
	}{
		"newer":   {[]byte{0, 0, 0, format + 1}, ErrFormatTooNew},
		"zero":    {[]byte{0, 0, 0, 0}, ErrDamaged},
		"garbled": {[]byte{9}, ErrDamaged},
	} {
		t.Run(name, func(t *testing.T) {
			s := create(t, Options{})
			leave(t, s)
			editMeta(t, s.path, func(tx *bolt.Tx) error {
				return tx.Bucket([]byte("meta")).Put(formatKey, c.number)
			})
			refused(t, s.path, testIdentity, c.want)
		})
	}
}

func TestOpenRefusesAnotherIdentity(t *testing.T) {
	s := create(t, Options{})
	leave(t, s)
	for _, id := range []Identity{
		{Deployment: "ferrybill", Partition: 0, Partitions: 1, KeyParts: 1},
		{Deployment: "quillmere", Partition: 0, Partitions: 2, KeyParts: 1},
		{Deployment: "quillmere", Partition: 0, Partitions: 1, KeyParts: 2},
	} {
		refused(t, s.path, id, ErrIdentity)
	}
}

func TestOpenRefusesAStoreInUse(t *testing.T) {
	s := create(t, Options{})
	mustCommit(t, s, monitor.Changes{Position: 1}, Mark{})
	refused(t, s.path, testIdentity, ErrInUse)
	if _, err := OpenReadOnly(s.path, Options{LockWait: time.Millisecond}); !errors.Is(err, ErrInUse) {
		t.Errorf("OpenReadOnly gave %v, want ErrInUse", err)
	}
}

func TestReadOnly(t *testing.T) {
	s := create(t, Options{})
	mustCommit(t, s, monitor.Changes{Position: 7, Header: []byte("h")}, Mark{})
	leave(t, s)
	before, _ := contents(t, s.path)
	r, err := OpenReadOnly(s.path, Options{})
	if err != nil {
		t.Fatal(err)
	}
	if snap, err := r.Snapshot(); err != nil || snap.Position != 7 || string(snap.Header) != "h" {
		t.Errorf("Snapshot gave %+v, %v", snap, err)
	}
	if err := r.Commit(monitor.Changes{Position: 8}, Mark{}); !errors.Is(err, ErrReadOnly) {
		t.Errorf("Commit gave %v, want ErrReadOnly", err)
	}
	leave(t, r)
	if after, _ := contents(t, s.path); !bytes.Equal(before, after) {
		t.Error("reading changed the file")
	}
}

func TestEpochOnlyGrows(t *testing.T) {
	s := create(t, Options{})
	if err := s.SetEpoch(3); err != nil {
		t.Fatal(err)
	}
	for _, epoch := range []uint64{0, 2, 3} {
		if err := s.SetEpoch(epoch); !errors.Is(err, ErrEpoch) {
			t.Errorf("SetEpoch(%d) gave %v, want ErrEpoch", epoch, err)
		}
	}
	s = reopen(t, s)
	if epoch, err := s.Epoch(); err != nil || epoch != 3 {
		t.Errorf("Epoch gave %d, %v", epoch, err)
	}
}

func TestStreamIdentity(t *testing.T) {
	s := create(t, Options{})
	if _, known, err := s.Stream(); known || err != nil {
		t.Fatalf("a new store knows a stream: %t, %v", known, err)
	}
	first := StreamIdentity{Name: "quillmere-in", Created: time.Date(2026, 3, 2, 1, 2, 3, 456789, time.UTC)}
	other := StreamIdentity{Name: "quillmere-in", Created: first.Created.Add(time.Nanosecond)}
	if err := errors.Join(s.SetStream(first), s.SetStream(first)); err != nil {
		t.Fatal(err)
	}
	mustCommit(t, s, monitor.Changes{Position: 100}, Mark{Position: 100})
	if err := s.SetStream(other); !errors.Is(err, ErrStream) {
		t.Errorf("another stream gave %v, want ErrStream", err)
	}
	s = reopen(t, s)
	if id, known, err := s.Stream(); !known || err != nil || !id.Equal(first) {
		t.Errorf("Stream gave %v, %t, %v", id, known, err)
	}
	if err := s.AcceptStream(other, 4); err != nil {
		t.Fatal(err)
	}
	if id, _, err := s.Stream(); err != nil || !id.Equal(other) {
		t.Errorf("after AcceptStream: %v, %v", id, err)
	}
	if marks, err := s.Marks(); err != nil || len(marks) != 0 {
		t.Errorf("marks of the old stream stayed: %v, %v", marks, err)
	}
	for _, want := range []bool{true, false} { // what the header says is of the old stream until the next one is written
		if snap, err := s.Snapshot(); err != nil || snap.Renumbered != want {
			t.Errorf("renumbered %t, want %t: %v", snap.Renumbered, want, err)
		}
		if want {
			mustCommit(t, s, monitor.Changes{Position: 5, Header: []byte("of the new stream")}, Mark{Position: 5})
		}
	}
}

func TestCopyIsAStore(t *testing.T) {
	s := create(t, Options{})
	mustCommit(t, s, monitor.Changes{Position: 3, Header: []byte("three")}, Mark{})
	path := filepath.Join(t.TempDir(), "copy.db")
	if n, err := s.CopyTo(path); err != nil || n == 0 {
		t.Fatalf("CopyTo gave %d, %v", n, err)
	}
	if _, err := s.CopyTo(path); !errors.Is(err, fs.ErrExist) {
		t.Errorf("a second CopyTo gave %v, want fs.ErrExist", err)
	}
	mustCommit(t, s, monitor.Changes{Position: 4}, Mark{})
	c, err := Open(path, testIdentity, Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer leave(t, c)
	if position, err := c.Position(); err != nil || position != 3 {
		t.Errorf("the copy stands at %d, %v; want 3", position, err)
	}
	if report, err := CheckFile(context.Background(), path, Options{LockWait: time.Millisecond}); !errors.Is(err, ErrInUse) {
		t.Errorf("CheckFile of an open copy gave %+v, %v", report, err)
	}
}
