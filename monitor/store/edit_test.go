package store

import (
	"errors"
	"fmt"

	bolt "go.etcd.io/bbolt"
)

// editHead changes the head of a store behind its back.
func editHead(change func(h *head)) func(s *Store) error {
	return func(s *Store) error {
		return s.update("edit", func(_ *bolt.Tx, h *head) error {
			change(h)
			return nil
		})
	}
}

// drop removes the first or last value of a bucket behind the store's back.
func drop(which shelf, first bool) func(s *Store) error {
	return func(s *Store) error {
		return s.update("edit", func(tx *bolt.Tx, _ *head) error {
			r, err := which.in(tx)
			if err != nil {
				return err
			}
			key, _ := r.Cursor().Last()
			if first {
				key, _ = r.Cursor().First()
			}
			if key == nil {
				return errors.New("nothing in " + which.name)
			}
			if err := r.Delete(key); err != nil {
				return fmt.Errorf("%s: %w", which.name, err)
			}
			return nil
		})
	}
}

// dropDay removes the last day of the archive behind the store's back.
func dropDay(s *Store) error {
	return s.update("edit", func(tx *bolt.Tx, _ *head) error {
		r, err := archiveShelf.in(tx)
		if err != nil {
			return err
		}
		key, _ := r.Cursor().Last()
		return r.DeleteBucket(key)
	})
}

// dropPart removes the first part of the last day of the archive.
func dropPart(s *Store) error {
	return s.update("edit", func(tx *bolt.Tx, _ *head) error {
		r, err := archiveShelf.in(tx)
		if err != nil {
			return err
		}
		key, _ := r.Cursor().Last()
		d := r.day(key)
		part, _ := d.Cursor().First()
		return d.remove(part)
	})
}
