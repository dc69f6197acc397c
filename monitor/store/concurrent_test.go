package store

import (
	"bytes"
	"fmt"
	"path/filepath"
	"sync"
	"testing"
	"time"

	"tailbell/monitor"
	"tailbell/monitor/life"
)

// TestReadersBesideCommits reads, delivers, copies and checks while commits go
// on; the race detector watches.
func TestReadersBesideCommits(t *testing.T) {
	s := create(t, Options{})
	if err := s.Outlets(FromOldest, "bus"); err != nil {
		t.Fatal(err)
	}
	done := make(chan struct{})
	var readers sync.WaitGroup
	for name, read := range map[string]func(i int) error{
		"alerts":  func(int) error { _, err := s.Alerts(AlertFilter{NotDone: true}, 0, 50); return err },
		"refused": func(int) error { _, err := s.Refused(0, 50); return err },
		"copy":    func(int) error { var b bytes.Buffer; _, err := s.Copy(&b); return err },
		"copy to": func(i int) error {
			_, err := s.CopyTo(filepath.Join(filepath.Dir(s.path), fmt.Sprint("copy", i)))
			return err
		},
		"check": func(int) error { _, err := s.Check(t.Context()); return err },
		"deliver": func(int) error {
			rows, err := s.Pending("bus", 10)
			if err != nil || len(rows) == 0 {
				return err
			}
			return s.Delivered("bus", rows[len(rows)-1].Number, 0)
		},
	} {
		readers.Go(func() {
			for i := 0; ; i++ {
				select {
				case <-done:
					return
				default:
				}
				if err := read(i); err != nil {
					t.Errorf("%s: %v", name, err)
					return
				}
			}
		})
	}
	for position := uint64(1); position <= 40; position++ {
		mustCommit(t, s, monitor.Changes{
			Position: position,
			Series:   []monitor.SeriesChange{{Number: 0, Data: make([]byte, 5000)}},
			Alerts:   []life.Record{{ID: fmt.Sprint(position % 20), Condition: life.Returned}},
			Steps:    []life.Notice{{Key: fmt.Sprint(position)}},
			Refused:  []monitor.Refusal{{Position: position, Reason: monitor.NotJSON}},
		}, Mark{Position: position})
	}
	close(done)
	readers.Wait()
	report, err := s.Check(t.Context())
	if err != nil || report.Position != 40 || report.Alerts != 20 {
		t.Errorf("Check gave %+v, %v", report, err)
	}
}

// TestGrowthBesideAnOpenRead commits more than the file's map held at first
// while a read is open: a map that must grow waits for every read, and for ever
// if the reader itself commits. The address space reserved keeps it from that.
func TestGrowthBesideAnOpenRead(t *testing.T) {
	s := create(t, Options{})
	tx, err := s.db.Begin(false)
	if err != nil {
		t.Fatal(err)
	}
	defer func() {
		if err := tx.Rollback(); err != nil {
			t.Error(err)
		}
	}()
	done := make(chan error, 1)
	go func() {
		for position := uint64(1); position <= 20; position++ {
			err := s.Commit(monitor.Changes{
				Position: position, Series: []monitor.SeriesChange{{Number: 0, Data: make([]byte, 1<<20)}},
			}, Mark{Position: position})
			if err != nil {
				done <- err
				return
			}
		}
		done <- nil
	}()
	select {
	case err := <-done:
		if err != nil {
			t.Error(err)
		}
	case <-time.After(30 * time.Second):
		t.Error("commits wait for an open read")
	}
}
