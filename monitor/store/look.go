package store

import (
	"errors"
	"fmt"
	"os"
	"time"

	bolt "go.etcd.io/bbolt"
	bolterrors "go.etcd.io/bbolt/errors"
)

// look reads a file, under a shared lock and without writing, as far as is
// needed to know that it is a store of this format whose pages hang together.
func look(path string, wait time.Duration) (Identity, error) {
	var id Identity
	info, err := os.Stat(path)
	if err != nil {
		return id, err
	}
	if !info.Mode().IsRegular() {
		return id, fmt.Errorf("it is no regular file: %w", ErrForeign)
	}
	var db *bolt.DB
	err = guard(func() (err error) {
		db, err = bolt.Open(path, 0o600, &bolt.Options{ReadOnly: true, Timeout: wait, NoStatistics: true})
		return err
	})
	if errors.Is(err, bolterrors.ErrTimeout) {
		return id, ErrInUse
	}
	if err != nil {
		return id, unreadable(path, err)
	}
	err = survey(path)
	if err == nil {
		err = guard(func() error {
			return db.View(func(tx *bolt.Tx) error {
				var err error
				id, err = readMeta(tx)
				return err
			})
		})
	}
	return id, errors.Join(err, db.Close())
}

// unreadable says what a file is that bbolt could not open for reason.
func unreadable(path string, reason error) error {
	f, err := os.Open(path)
	if err != nil {
		return err
	}
	sheet, err := readSheet(f)
	if err := errors.Join(err, f.Close()); err != nil {
		return err
	}
	switch {
	case sheet.newer:
		return fmt.Errorf("its pages are of a later kind (%w): %w", reason, ErrFormatTooNew)
	case sheet.ours:
		return fmt.Errorf("its first pages can't be read (%w): %w", reason, ErrDamaged)
	}
	return fmt.Errorf("no database (%w): %w", reason, ErrForeign)
}

// survey checks the pages of a file that nobody writes to.
func survey(path string) error {
	f, err := os.Open(path)
	if err != nil {
		return err
	}
	_, err = readPages(f)
	return errors.Join(err, f.Close())
}
