package store

import (
	"bytes"
	"errors"
	"os"
	"path/filepath"
	"syscall"
	"testing"

	"tailbell/monitor"
)

// TestFullDisk fills a small disk: nothing of a commit that finds no room is
// stored, and the same commit holds once there is room again.
func TestFullDisk(t *testing.T) {
	folder := t.TempDir()
	if err := syscall.Mount("none", folder, "tmpfs", 0, "size=2m"); err != nil {
		if os.Getenv("TAILBELL_CI") != "" {
			t.Fatalf("no disk can be mounted: %v", err)
		}
		t.Skipf("a disk of its own can't be mounted here (%v); TestNoRoom proves the same with a limit", err)
	}
	defer func() {
		if err := syscall.Unmount(folder, 0); err != nil {
			t.Error(err)
		}
	}()
	s, err := Create(filepath.Join(folder, "p0.db"), testIdentity, Options{})
	if err != nil {
		t.Fatal(err)
	}
	ballast := filepath.Join(folder, "ballast")
	if err := os.WriteFile(ballast, make([]byte, 1<<20), 0o600); err != nil {
		t.Fatal(err)
	}
	position := uint64(0)
	commit := func() error {
		return s.Commit(monitor.Changes{Position: position + 1, Archived: []monitor.ArchivedSlot{
			{Data: bytes.Repeat([]byte("x"), 100_000)},
		}, Series: []monitor.SeriesChange{{Number: 0, Data: []byte("{}")}}}, Mark{})
	}
	for err = commit(); err == nil; err = commit() {
		position++
	}
	if !errors.Is(err, ErrFull) || position == 0 {
		t.Fatalf("after %d commits: %v, want ErrFull", position, err)
	}
	if err := commit(); !errors.Is(err, ErrFull) {
		t.Errorf("again: %v, want ErrFull", err)
	}
	if at, err := s.Position(); err != nil || at != position {
		t.Errorf("the store stands at %d, %v; want %d", at, err, position)
	}
	if err := os.Remove(ballast); err != nil {
		t.Fatal(err)
	}
	if err := commit(); err != nil {
		t.Errorf("with room again: %v", err)
	}
	leave(t, s)
}
