package store

import (
	"fmt"
	"path/filepath"
	"testing"

	bolt "go.etcd.io/bbolt"

	"tailbell/monitor"
)

// benchStore makes a store, fsynced, that knows so many series.
func benchStore(b *testing.B, series int) (*Store, *monitor.Changes) {
	b.Helper()
	s, err := Create(filepath.Join(b.TempDir(), "p0.db"), testIdentity, Options{})
	if err != nil {
		b.Fatal(err)
	}
	b.Cleanup(func() {
		if err := s.Close(); err != nil {
			b.Error(err)
		}
	})
	state := make([]byte, 200)
	c := &monitor.Changes{Position: 1}
	for n := range series {
		c.States = append(c.States, monitor.SeriesChange{Number: uint32(n), Data: state})
	}
	if err := s.Commit(*c, Mark{}); err != nil {
		b.Fatal(err)
	}
	return s, &monitor.Changes{Position: 1, Cycle: 1, Header: make([]byte, 100)}
}

// BenchmarkCommit commits batches that touch some of 100,000 series, each with
// a patch of 60 bytes, an id of 60 bytes, and a checkpoint slice as long.
func BenchmarkCommit(b *testing.B) {
	const series = 100_000
	for _, touched := range []int{1, 100, 1_000, 10_000, 100_000} {
		b.Run(fmt.Sprint(touched), func(b *testing.B) {
			s, c := benchStore(b, series)
			patch, state := make([]byte, 60), make([]byte, 200)
			next, ids := 0, 0
			b.ReportAllocs()
			for b.Loop() {
				c.Position++
				c.Series, c.States, c.IDs = c.Series[:0], c.States[:0], c.IDs[:0]
				for i := range touched {
					n := uint32(i * (series / touched))
					c.Series = append(c.Series, monitor.SeriesChange{Number: n, Data: patch})
					c.IDs = append(c.IDs, monitor.IDChange{Generation: int64(ids / 1_000_000), Value: patch})
					ids++
					if next+i < series {
						c.States = append(c.States, monitor.SeriesChange{Number: uint32(next + i), Data: state})
					}
				}
				c.DroppedGenerations = []int64{int64(ids/1_000_000) - 3}
				if err := s.Commit(*c, Mark{Position: c.Position}); err != nil {
					b.Fatal(err)
				}
				if next += touched; next >= series {
					next, c.Cycle = 0, c.Cycle+1
				}
			}
			b.ReportMetric(float64(b.Elapsed().Microseconds())/float64(b.N)/float64(touched), "us/series")
		})
	}
}

// BenchmarkOpen opens and recovers a store of 100,000 series with a million
// patches and half a million ids.
func BenchmarkOpen(b *testing.B) {
	const series = 100_000
	s, c := benchStore(b, series)
	patch := make([]byte, 60)
	for range 10 {
		c.Position++
		c.Series, c.IDs = c.Series[:0], c.IDs[:0]
		for n := range series {
			c.Series = append(c.Series, monitor.SeriesChange{Number: uint32(n), Data: patch})
			if n%2 == 0 {
				c.IDs = append(c.IDs, monitor.IDChange{Generation: int64(c.Position % 3), Value: patch})
			}
		}
		if err := s.Commit(*c, Mark{}); err != nil {
			b.Fatal(err)
		}
	}
	if err := s.Close(); err != nil {
		b.Fatal(err)
	}
	for b.Loop() {
		s, err := Open(s.path, testIdentity, Options{})
		if err != nil {
			b.Fatal(err)
		}
		if snap, err := s.Snapshot(); err != nil || len(snap.Series) != series || len(snap.IDs) != 500_000 {
			b.Fatal(len(snap.Series), len(snap.IDs), err)
		}
		if err := s.Close(); err != nil {
			b.Fatal(err)
		}
	}
}

// BenchmarkBareCommit is the yardstick: one small key in one fsynced commit.
// Disks differ and so do their days; only ratios to it mean something.
func BenchmarkBareCommit(b *testing.B) {
	s, _ := benchStore(b, 1)
	for b.Loop() {
		err := s.db.Update(func(tx *bolt.Tx) error {
			return tx.Bucket([]byte(headerShelf.name)).Put([]byte("key"), []byte("value"))
		})
		if err != nil {
			b.Fatal(err)
		}
	}
}

// BenchmarkArchive commits slots that left memory, all of a few days.
func BenchmarkArchive(b *testing.B) {
	for _, slots := range []int{1, 100, 10_000} {
		b.Run(fmt.Sprint(slots), func(b *testing.B) {
			s, c := benchStore(b, 1000)
			data := make([]byte, 110)
			b.ReportAllocs()
			for b.Loop() {
				c.Position++
				c.Archived = c.Archived[:0]
				day := int64(c.Position/20) * 24 * 60 * 60 * 1_000_000
				for i := range slots {
					c.Archived = append(c.Archived, monitor.ArchivedSlot{Number: uint32(i % 1000), Start: monitor.Instant(day + int64(i%3)*8*60*60*1_000_000), Data: data})
				}
				if err := s.Commit(*c, Mark{Position: c.Position}); err != nil {
					b.Fatal(err)
				}
			}
		})
	}
}
