package main

import (
	"errors"
	"fmt"
	"io/fs"
	"os"
	"path/filepath"

	"tailbell/config"
	"tailbell/monitor/store"
)

// divisionPlace is the folder of a division's drafts, and of what they replace.
type divisionPlace string

func placeOf(setup *config.Setup, number uint64) divisionPlace {
	return divisionPlace(filepath.Join(setup.Folder, fmt.Sprintf("division-%d", number)))
}

func (p divisionPlace) drafts() string { return filepath.Join(string(p), "new") }
func (p divisionPlace) aside() string  { return filepath.Join(string(p), "before") }

// draft is the new store of a partition.
func (p divisionPlace) draft(n int) string {
	return filepath.Join(p.drafts(), fmt.Sprintf("partition-%d.store", n))
}

// stand is a store of an old partition that had none.
func (p divisionPlace) stand(n int) string {
	return filepath.Join(string(p), fmt.Sprintf("partition-%d.store", n))
}

func (p divisionPlace) make() error { return os.MkdirAll(p.drafts(), 0o700) }

func (p divisionPlace) clear() error { return os.RemoveAll(string(p)) }

// swap puts the drafts in the place of the stores. It may be done again after
// it broke off; it reports whether there was anything to do.
func (p divisionPlace) swap(setup, next *config.Setup) (did bool, err error) {
	if _, err := os.Stat(p.drafts()); errors.Is(err, fs.ErrNotExist) {
		return false, nil
	} else if err != nil {
		return false, err
	}
	if err := p.putAside(next); err != nil {
		return false, err
	}
	for q := range next.Partitions {
		err := os.Rename(p.draft(q), storePath(setup, q))
		if err != nil && !errors.Is(err, fs.ErrNotExist) {
			return false, err
		}
	}
	for n := range setup.Partitions {
		if err := os.Remove(p.stand(n)); err != nil && !errors.Is(err, fs.ErrNotExist) {
			return false, err
		}
	}
	return true, os.Remove(p.drafts())
}

// putAside moves the stores that are not of the new partitions.
func (p divisionPlace) putAside(next *config.Setup) error {
	if err := os.MkdirAll(p.aside(), 0o700); err != nil {
		return err
	}
	entries, err := os.ReadDir(next.Folder)
	if err != nil {
		return err
	}
	for _, entry := range entries {
		file := filepath.Join(next.Folder, entry.Name())
		if ours, err := filepath.Match("partition-*.store", entry.Name()); err != nil || !ours {
			continue
		}
		st, err := store.OpenReadOnly(file, store.Options{})
		if err != nil {
			return err
		}
		id := st.Identity()
		if err := st.Close(); err != nil {
			return err
		}
		if id.Partitions == next.Partitions {
			continue // it is in place already
		}
		if err := os.Rename(file, filepath.Join(p.aside(), filepath.Base(file))); err != nil {
			return err
		}
	}
	return nil
}
