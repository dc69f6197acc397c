package store

import (
	"context"
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"

	bolt "go.etcd.io/bbolt"
)

// compactStep is about how many bytes of keys and values one transaction of a
// compacting copy takes over.
const compactStep = 16 << 20

// CompactTo writes a consistent copy into a new file like CopyTo, but value by
// value instead of page by page: what was removed or has expired is in no page
// of it, and it is no larger than what it holds. The copy is checked whole, so
// that a damaged store makes none. It is slower than CopyTo. Commits go on
// meanwhile. An existing file is left alone: fs.ErrExist.
func (s *Store) CompactTo(path string) (n int64, err error) {
	if _, err := os.Lstat(path); err == nil {
		return 0, fmt.Errorf("copy %s: %w", path, fs.ErrExist)
	}
	draft, err := os.CreateTemp(filepath.Dir(path), filepath.Base(path)+".new-*")
	if err != nil {
		return 0, fmt.Errorf("copy %s: %w", path, err)
	}
	err = errors.Join(draft.Close(), guard(func() error { return compact(draft.Name(), s.db) }))
	if err == nil {
		n, err = seal(draft.Name())
	}
	if err == nil { // what is damaged must not be taken for a copy
		_, err = CheckFile(context.Background(), draft.Name(), s.opts)
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

// compact takes everything of a database over into an empty file.
func compact(path string, from *bolt.DB) error {
	// One sync at the end is enough: the file has no name yet.
	to, err := bolt.Open(path, 0o600, &bolt.Options{
		PageSize: pageSize, FreelistType: bolt.FreelistMapType, NoSync: true, NoStatistics: true,
	})
	if err != nil {
		return err
	}
	return errors.Join(bolt.Compact(to, from, compactStep), to.Close())
}

// seal syncs a complete file, checks its pages and returns its length.
func seal(path string) (int64, error) {
	f, err := os.OpenFile(path, os.O_RDWR, 0)
	if err != nil {
		return 0, err
	}
	info, err := f.Stat()
	if err = errors.Join(err, f.Sync(), f.Close()); err != nil {
		return 0, err
	}
	return info.Size(), survey(path)
}

// ReplaceWith puts a complete store file in the place of the one at path, if
// there is one, which gets the name aside; at every moment one of the two has
// its place. No process may have either open. It fails, having done nothing, if
// aside is taken.
func ReplaceWith(file, path, aside string) error {
	if _, err := os.Lstat(aside); err == nil {
		return fmt.Errorf("putting %s in place: %s: %w", file, aside, fs.ErrExist)
	}
	err := os.Link(path, aside)
	switch {
	case errors.Is(err, fs.ErrNotExist): // nothing is there
	case err != nil:
		err = os.Rename(path, aside) // a file system without links
		if err != nil {
			return fmt.Errorf("putting %s aside: %w", path, err)
		}
	}
	if err := os.Rename(file, path); err != nil {
		return fmt.Errorf("putting %s in place: %w", file, err)
	}
	return syncFolder(filepath.Dir(path))
}
