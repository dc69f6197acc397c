package store

import (
	"context"
	"errors"
	"fmt"
	"io"
	"io/fs"
	"os"
	"path/filepath"

	bolt "go.etcd.io/bbolt"
)

// Copy writes a consistent copy of the whole file as it stands and returns its
// length in bytes. Commits go on meanwhile, but the pages that they free are
// not used again before it ends: give it a file, not a slow line.
func (s *Store) Copy(w io.Writer) (int64, error) {
	var n int64
	err := s.view(func(tx *bolt.Tx) error {
		var err error
		n, err = tx.WriteTo(w)
		return err
	})
	return n, err
}

// CopyTo writes a consistent copy into a new file, which appears under its
// name once it is complete, checked and on the disk. An existing file is left
// alone: fs.ErrExist.
func (s *Store) CopyTo(path string) (n int64, err error) {
	if _, err := os.Lstat(path); err == nil {
		return 0, fmt.Errorf("copy %s: %w", path, fs.ErrExist)
	}
	draft, err := os.CreateTemp(filepath.Dir(path), filepath.Base(path)+".new-*")
	if err != nil {
		return 0, fmt.Errorf("copy %s: %w", path, err)
	}
	n, err = s.Copy(draft)
	err = errors.Join(err, draft.Sync(), draft.Close())
	if err == nil {
		err = survey(draft.Name())
	}
	if err == nil {
		err = publish(draft.Name(), path)
	}
	if gone := os.Remove(draft.Name()); gone != nil && !errors.Is(gone, fs.ErrNotExist) {
		err = errors.Join(err, gone)
	}
	if err != nil {
		return 0, fmt.Errorf("copy %s: %w", path, translate(err, false))
	}
	return n, nil
}

// CheckFile opens a file for reading, checks it whole and closes it.
func CheckFile(ctx context.Context, path string, opts Options) (Report, error) {
	s, err := OpenReadOnly(path, opts)
	if err != nil {
		return Report{}, err
	}
	report, err := s.Check(ctx)
	return report, errors.Join(err, s.Close())
}
