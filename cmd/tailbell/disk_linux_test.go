package main

import (
	"context"
	"errors"
	"fmt"
	"net/http"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"
	"time"

	"tailbell/ingest/bus"
)

// noDisk ends a test that needs a disk of its own where none can be mounted:
// skipped on a developer's machine, failed where everything must be there.
func noDisk(t *testing.T, err error) {
	t.Helper()
	if os.Getenv("TAILBELL_CI") != "" {
		t.Fatalf("no disk can be mounted: %v", err)
	}
	t.Skipf("a disk of its own can't be mounted here: %v", err)
}

// smallDisk puts the folder of a set-up on a disk of its own.
func smallDisk(t *testing.T, setup, size string) (folder string) {
	t.Helper()
	folder = filepath.Join(filepath.Dir(setup), "data")
	if err := os.MkdirAll(folder, 0o700); err != nil {
		t.Fatal(err)
	}
	if err := syscall.Mount("none", folder, "tmpfs", 0, "mode=700,size="+size); err != nil {
		noDisk(t, err)
	}
	t.Cleanup(func() {
		if err := syscall.Unmount(folder, syscall.MNT_DETACH); err != nil {
			t.Error(err)
		}
	})
	return folder
}

// fill leaves no room on the disk of a folder, and returns the file that takes it.
func fill(t *testing.T, folder string) string {
	t.Helper()
	f, err := os.Create(filepath.Join(folder, "ballast"))
	if err != nil {
		t.Fatal(err)
	}
	for size := 1 << 20; size > 0; {
		if _, err := f.Write(make([]byte, size)); errors.Is(err, syscall.ENOSPC) {
			size /= 2
		} else if err != nil {
			t.Fatal(err)
		}
	}
	if err := f.Close(); err != nil {
		t.Fatal(err)
	}
	return f.Name()
}

// TestFullDisk fills the disk under a running daemon several times: publishers
// get errors, health and status say why, and all that was acknowledged is
// counted once there is room, by itself.
func TestFullDisk(t *testing.T) {
	setup := wardSetup(t)
	folder := smallDisk(t, setup, "24m")
	s := newService(t, setup)
	s.start()
	b := s.dial()
	acked, refusedPublishes := 0, 0
	publish := func() error {
		ctx, cancel := context.WithTimeout(t.Context(), 3*time.Second)
		defer cancel()
		if b == nil || !b.Connected() {
			if b != nil {
				if err := b.Close(); err != nil {
					t.Log(err)
				}
			}
			var err error
			if b, err = bus.Dial(ctx, s.setup()); err != nil {
				b = nil
				return err
			}
		}
		// Ids of its own for each, so that what was stored without an
		// acknowledgement is a second one.
		_, err := b.Publish(ctx, bus.Outgoing{Data: fmt.Appendf(nil, `{"id":"n%d-%s","series":"quillmere-east/ward-1/fall","start":"%[3]s","end":"%[4]s","events":0,"exposure":1}`,
			acked, strings.Repeat("x", 150), time.Now().UTC().Truncate(24*time.Hour).AddDate(0, 0, -1-acked%20).Format(time.RFC3339),
			time.Now().UTC().Truncate(24*time.Hour).AddDate(0, 0, -acked%20).Format(time.RFC3339))})
		if err == nil {
			acked++
		} else {
			refusedPublishes++
		}
		return err
	}
	for round := range 3 {
		for range 30 {
			if err := publish(); err != nil {
				t.Fatal(err)
			}
		}
		ballast := fill(t, folder)
		s.await("trouble", func() bool {
			if err := publish(); err != nil {
				t.Log(err)
			}
			code, text := s.ready()
			return code == http.StatusServiceUnavailable && (strings.Contains(text, "no space left") || strings.Contains(text, "no room left"))
		})
		_, text := s.ready()
		t.Logf("round %d: %s", round, text)
		s.says(0, []string{"trouble in ", ": no room: "}, "status")
		if err := os.Remove(ballast); err != nil {
			t.Fatal(err)
		}
		s.await("readiness without help", func() bool { code, _ := s.ready(); return code == http.StatusOK })
		s.await("publishing without help", func() bool { return publish() == nil })
	}
	end := s.publish(day(2, 1, 0))
	r := s.reaches(end)
	a := r.Partitions[0].Account
	t.Logf("%d acknowledged, %d refused to the publisher; account %+v", acked, refusedPublishes, a)
	if a.Counted != int64(acked)+1 || a.Refused != 0 || len(r.Troubles) != 0 {
		t.Errorf("%d acknowledged, but the account is %+v; troubles %v", acked+1, a, r.Troubles)
	}
	s.stop(syscall.SIGTERM)
	soundStore(t, folder)
}

func soundStore(t *testing.T, folder string) {
	t.Helper()
	if code, out, complaint := run(t, "store", "check", folder); code != 0 || !strings.Contains(out, "is sound") {
		t.Errorf("the store is not sound:\n%s%s", out, complaint)
	}
}

// TestFullDiskStops ends a daemon whose disk is full: it must not wait for room.
func TestFullDiskStops(t *testing.T) {
	setup := wardSetup(t)
	folder := smallDisk(t, setup, "24m")
	s := newService(t, setup)
	s.start()
	s.publish(day(1, 3, 0))
	fill(t, folder)
	for range 3 { // so that the store has met it, or the bus
		ctx, cancel := context.WithTimeout(t.Context(), time.Second)
		if _, err := s.dial().Publish(ctx, bus.Outgoing{Data: []byte(day(1, 2, 0))}); err != nil {
			t.Log(err)
		}
		cancel()
	}
	s.stop(syscall.SIGTERM)
}

// TestReadOnlyFolder starts on a disk that can't be written.
func TestReadOnlyFolder(t *testing.T) {
	setup := wardSetup(t)
	folder := smallDisk(t, setup, "24m")
	s := newService(t, setup)
	s.start()
	end := s.publish(day(1, 3, 0))
	s.reaches(end)
	s.stop(syscall.SIGTERM)
	if err := syscall.Mount("none", folder, "tmpfs", syscall.MS_REMOUNT|syscall.MS_RDONLY, ""); err != nil {
		noDisk(t, err)
	}
	code, complaint := refusesToRun(t, setup)
	if code != 1 || !strings.Contains(complaint, "read-only file system") || !strings.Contains(complaint, folder) {
		t.Errorf("exit code %d:\n%s", code, complaint)
	}
	soundStore(t, folder) // reading needs no writing
	s.says(0, []string{"No alerts"}, "alert", "list")
	if err := syscall.Mount("none", folder, "tmpfs", syscall.MS_REMOUNT, ""); err != nil {
		t.Fatal(err)
	}
	s.start()
	if r := s.reaches(end); r.Partitions[0].Account.Counted != 1 {
		t.Errorf("afterwards: %+v", r.Partitions[0].Account)
	}
	s.stop(syscall.SIGTERM)
}

// TestFullDiskUnderTheStore fills the store's disk alone: what the bus goes on to
// acknowledge is counted once there is room, and a daemon that waits for it can
// be stopped.
func TestFullDiskUnderTheStore(t *testing.T) {
	setup := wardSetup(t)
	folder := smallDisk(t, setup, "4m")
	streams := filepath.Join(folder, "bus")
	if err := os.Mkdir(streams, 0o700); err != nil {
		t.Fatal(err)
	}
	if err := syscall.Mount("none", streams, "tmpfs", 0, "mode=700,size=24m"); err != nil {
		noDisk(t, err)
	}
	t.Cleanup(func() {
		if err := syscall.Unmount(streams, syscall.MNT_DETACH); err != nil {
			t.Error(err)
		}
	})
	s := newService(t, setup)
	s.start()
	s.reaches(s.publish(day(1, 20, 0)))
	ballast := fill(t, folder)
	sent, end := 1, uint64(0)
	s.await("trouble", func() bool {
		var batch []string
		for range 200 { // refused bytes fill pages quickly
			batch = append(batch, fmt.Sprintf(`{"id":"%d-%s","series":"quillmere-east/ward-1/fall"}`, sent, strings.Repeat("x", 150)))
			sent++
		}
		end = s.publish(batch...)
		code, text := s.ready()
		return code == http.StatusServiceUnavailable && strings.Contains(text, "the intake stands still: ")
	})
	r, ok := s.status()
	if !ok || len(r.Troubles) != 1 || r.Troubles[0].Kind != troubleNoRoom || r.Partitions[0].End < end {
		t.Errorf("status: %+v", r)
	}
	s.stop(syscall.SIGTERM) // it does not wait for room
	if err := os.Remove(ballast); err != nil {
		t.Fatal(err)
	}
	s.start()
	ballast = fill(t, folder)
	for range 20 {
		end = s.publish(strings.Repeat(`{"note":"`+strings.Repeat("y", 300)+`"}`+"\n", 100))
		sent += 100
	}
	s.await("trouble again", func() bool { code, _ := s.ready(); return code == http.StatusServiceUnavailable })
	if err := os.Remove(ballast); err != nil {
		t.Fatal(err)
	}
	r = s.reaches(end)
	s.await("readiness", func() bool { code, _ := s.ready(); return code == http.StatusOK })
	if a := r.Partitions[0].Account; a.Elements != int64(sent) || a.Counted != 1 || a.Refused != int64(sent-1) {
		t.Errorf("%d sent, the account is %+v", sent, a)
	}
	s.stop(syscall.SIGTERM)
	soundStore(t, folder)
}
