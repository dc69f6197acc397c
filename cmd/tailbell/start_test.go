package main

import (
	"bytes"
	"encoding/binary"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"

	bolt "go.etcd.io/bbolt"
)

// TestStoresThatAreRefused starts on stores that are damaged, cut off, of a
// later version, or another program's: each is named, and left as it is.
func TestStoresThatAreRefused(t *testing.T) {
	setup := wardSetup(t)
	s := newService(t, setup)
	s.start()
	s.reaches(s.publish(day(1, 3, 1), day(1, 2, 0)))
	s.stop(syscall.SIGTERM)
	path := storeOf(t, setup)
	sound, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	for _, one := range []struct {
		name, says string
		spoil      func(t *testing.T) []byte
	}{
		{"a flipped byte", "the store is damaged", func(*testing.T) []byte {
			// Of every page that is or was the head's.
			return bytes.ReplaceAll(sound, []byte(`"position":`), []byte(`"posjtion":`))
		}},
		// After its third page: a file grows by leaps, and half of it may hold all pages in use.
		{"cut off", "cut off", func(*testing.T) []byte { return sound[:3*os.Getpagesize()] }},
		{"empty", "not a Tailbell store", func(*testing.T) []byte { return nil }},
		{"text", "not a Tailbell store", func(*testing.T) []byte { return bytes.Repeat([]byte("ledger,2026\n"), 5000) }},
		{"zeros", "store", func(*testing.T) []byte { return make([]byte, len(sound)) }},
		{"a database of another program", "a database of another program", func(t *testing.T) []byte {
			t.Helper()
			return database(t, func(tx *bolt.Tx) error { _, err := tx.CreateBucket([]byte("ledger")); return err })
		}},
		{"a later format", "written by a later version", func(t *testing.T) []byte {
			t.Helper()
			return database(t, func(tx *bolt.Tx) error {
				b, err := tx.CreateBucket([]byte("meta"))
				if err != nil {
					return err
				}
				if err := b.Put([]byte("magic"), []byte("tailbell store")); err != nil {
					return err
				}
				return b.Put([]byte("format"), binary.BigEndian.AppendUint32(nil, 2))
			})
		}},
	} {
		t.Run(one.name, func(t *testing.T) {
			spoilt := one.spoil(t)
			if err := os.WriteFile(path, spoilt, 0o600); err != nil {
				t.Fatal(err)
			}
			if code, complaint := refusesToRun(t, setup); code != 1 || !strings.Contains(complaint, one.says) || !strings.Contains(complaint, path) {
				t.Errorf("run: exit code %d, want %q and the file's name:\n%s", code, one.says, complaint)
			}
			copied := filepath.Join(t.TempDir(), "copy")
			for _, args := range [][]string{
				{"store", "check", path},
				{"store", "copy", path, copied},
			} {
				code, out, complaint := run(t, args...)
				if code != 1 || !strings.Contains(out+complaint, one.says) || !strings.Contains(out+complaint, filepath.Dir(path)) && !strings.Contains(out+complaint, copied) {
					t.Errorf("%s: exit code %d, want %q and the file's name:\n%s%s", args[0], code, one.says, out, complaint)
				}
			}
			if _, err := os.Lstat(copied); err == nil {
				t.Error("a copy was made of it")
			}
			left, err := os.ReadFile(path)
			if err != nil || !bytes.Equal(left, spoilt) {
				t.Errorf("the file was touched: %v", err)
			}
		})
	}
	if err := os.WriteFile(path, sound, 0o600); err != nil {
		t.Fatal(err)
	}
	s.start()
	if a := s.reaches(1).Partitions[0].Account; a.Counted != 2 {
		t.Errorf("with the sound file in place again: %+v", a)
	}
	s.stop(syscall.SIGTERM)
}

// database makes a database of bbolt and returns its bytes.
func database(t *testing.T, fill func(*bolt.Tx) error) []byte {
	t.Helper()
	path := filepath.Join(t.TempDir(), "db")
	db, err := bolt.Open(path, 0o600, nil)
	if err != nil {
		t.Fatal(err)
	}
	if err := db.Update(fill); err != nil {
		t.Fatal(err)
	}
	if err := db.Close(); err != nil {
		t.Fatal(err)
	}
	return readAll(t, path)
}

func readAll(t *testing.T, path string) []byte {
	t.Helper()
	b, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	return b
}

// TestSecondDaemon starts a second daemon on the same folder: it says who holds
// it, and the first one goes on.
func TestSecondDaemon(t *testing.T) {
	setup := wardSetup(t)
	s := newService(t, setup)
	s.start()
	s.reaches(s.publish(day(1, 3, 1)))
	code, complaint := refusesToRun(t, setup)
	if code != 1 || !strings.Contains(complaint, "in use") {
		t.Errorf("exit code %d:\n%s", code, complaint)
	}
	for _, args := range [][]string{{"store", "rebuild", t.TempDir()}, {"store", "accept"}} {
		if code, _, complaint := run(t, append(args, "--config", setup)...); code != 1 {
			t.Errorf("%v: exit code %d:\n%s", args, code, complaint)
		}
	}
	if a := s.reaches(s.publish(day(1, 2, 0))).Partitions[0].Account; a.Counted != 2 {
		t.Errorf("the first one: %+v", a)
	}
	s.stop(syscall.SIGTERM)
}
