package store

import (
	"context"
	"errors"
	"fmt"
	"os"

	bolt "go.etcd.io/bbolt"
)

// Report is what Check found.
type Report struct {
	Identity Identity `json:"identity"`
	Format   int      `json:"format"`
	Position uint64   `json:"position"`
	Commits  uint64   `json:"commits"`
	Epoch    uint64   `json:"epoch"`
	// FileBytes is the size of the file, FreeBytes what of it can be used again.
	FileBytes int64 `json:"file_bytes"`
	FreeBytes int64 `json:"free_bytes"`
	// TornMeta says that one of the two meta pages is not valid: the last
	// commit broke off, and the file stands at the one before.
	TornMeta bool `json:"torn_meta"`

	Series       uint64  `json:"series"`
	States       uint64  `json:"states"`
	Patches      uint64  `json:"patches"`
	JournalFirst uint64  `json:"journal_first"`
	Generations  uint64  `json:"generations"`
	IDs          uint64  `json:"ids"`
	Alerts       uint64  `json:"alerts"`
	OpenAlerts   uint64  `json:"open_alerts"`
	Refused      uint64  `json:"refused"` // ever
	RefusedRows  uint64  `json:"refused_rows"`
	RefusedRaw   uint64  `json:"refused_raw"`
	OutboxRows   uint64  `json:"outbox_rows"`
	Outlets      uint64  `json:"outlets"`
	Settings     uint64  `json:"settings"`
	Marks        uint64  `json:"marks"`
	Told         uint64  `json:"told"`    // summaries that other partitions are to be told
	Waiting      uint64  `json:"waiting"` // those of others that wait here
	Archive      Archive `json:"archive"`

	// Faults are what is wrong, the first ones of them.
	Faults []string `json:"faults,omitempty"`
}

// maxFaults bounds the faults of a report.
const maxFaults = 50

// Check reads the whole store: every page, every value with its checksum, all
// numbers without a gap, and that the indexes, cursors and counts agree. It
// returns an error that wraps ErrDamaged if anything is wrong; the report then
// lists it. Commits wait while it runs: check a copy of a busy store.
func (s *Store) Check(ctx context.Context) (Report, error) {
	s.writing.Lock()
	defer s.writing.Unlock()
	c := checker{report: Report{Identity: s.identity, Format: format}}
	err := guard(func() error { return s.check(ctx, &c) })
	if err != nil && !errors.Is(err, ErrDamaged) {
		return c.report, fmt.Errorf("store %s: check: %w", s.path, translate(err, false))
	}
	if err != nil {
		c.fault(err)
	}
	if len(c.report.Faults) > 0 {
		return c.report, fmt.Errorf("store %s: check found %d faults, first: %s: %w",
			s.path, len(c.report.Faults), c.report.Faults[0], ErrDamaged)
	}
	return c.report, nil
}

func (s *Store) check(ctx context.Context, c *checker) error {
	if err := c.pages(s.path); err != nil {
		return err
	}
	return s.db.View(func(tx *bolt.Tx) error {
		for err := range tx.Check() {
			c.fault(err)
		}
		if len(c.report.Faults) > 0 {
			return nil
		}
		id, err := readMeta(tx)
		if err != nil {
			return err
		}
		if id != s.identity {
			c.faultf("the identity is %s, it was %s", id, s.identity)
		}
		return c.contents(ctx, tx)
	})
}

// checker gathers what is found.
type checker struct {
	tx     *bolt.Tx
	h      head
	report Report
}

func (c *checker) fault(err error) {
	if len(c.report.Faults) < maxFaults {
		c.report.Faults = append(c.report.Faults, err.Error())
	}
}

func (c *checker) faultf(format string, args ...any) {
	c.fault(fmt.Errorf(format, args...))
}

// same notes a fault unless two counts agree.
func (c *checker) same(what string, have, want uint64) {
	if have != want {
		c.faultf("%s: found %d, expected %d", what, have, want)
	}
}

func (c *checker) pages(path string) error {
	f, err := os.Open(path)
	if err != nil {
		return err
	}
	info, err := f.Stat()
	if err == nil {
		var meta sheet
		c.report.FileBytes = info.Size()
		meta, err = readPages(f)
		c.report.TornMeta = meta.valid < 2
		c.report.FreeBytes = info.Size() - int64(meta.used*meta.pageSize)
	}
	return errors.Join(err, f.Close())
}

// contents checks the values, part by part; damage in one part does not hide
// that of another.
func (c *checker) contents(ctx context.Context, tx *bolt.Tx) error {
	c.tx = tx
	var err error
	if c.h, err = readHead(tx); err != nil {
		return err
	}
	c.report.Position, c.report.Commits, c.report.Epoch = c.h.Position, c.h.Commit, c.h.Epoch
	c.report.JournalFirst = c.h.JournalFirst
	for _, part := range []func() error{
		c.buckets, c.header, c.series, c.ids, c.archive, c.alerts, c.openAlerts,
		c.refused, c.refusedRaw, c.outbox, c.settings, c.marks, c.summaries,
	} {
		if err := ctx.Err(); err != nil {
			return err
		}
		if err := part(); err != nil {
			c.fault(err)
		}
	}
	return nil
}

// each calls use for the values of a shelf, with their payloads.
func (c *checker) each(s shelf, use func(r rack, key, payload []byte) error) (count uint64, err error) {
	r, err := s.in(c.tx)
	if err != nil {
		return 0, err
	}
	err = r.ForEach(func(key, value []byte) error {
		payload, err := r.open(key, value)
		if err != nil {
			return err
		}
		count++
		return use(r, key, payload)
	})
	return count, err
}

// run calls use for the values of a shelf, whose numbers must be first to last.
func (c *checker) run(s shelf, first, last uint64, use func(r rack, n uint64, payload []byte) error) (uint64, error) {
	next := first
	count, err := c.each(s, func(r rack, key, payload []byte) error {
		n, err := r.numberOf(key)
		if err == nil && n != next {
			err = r.damaged(key, fmt.Sprintf("expected was %d", next))
		}
		if err != nil {
			return err
		}
		next++
		return use(r, n, payload)
	})
	if err == nil && next != last+1 {
		err = s.damaged(number(next), fmt.Sprintf("it is missing, the last one is %d", last))
	}
	return count, err
}
