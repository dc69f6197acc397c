package store

import (
	"fmt"

	"tailbell/monitor"

	bolt "go.etcd.io/bbolt"
)

// Commit makes the results of a batch durable together with the position of
// its last message, in one fsynced transaction. The position must lie beyond
// the stored one (ErrPosition). Changes without a position are those that no
// message made; if there are none at all, nothing is written.
//
// The mark, if it has a position, belongs to the last message: its position
// must be that of the changes. Its Stored time moves the clock by which
// refused bytes expire.
//
// After ErrFull the same call may be tried again. After ErrFailed the store
// must be closed and opened again: its position then tells whether the commit
// holds.
func (s *Store) Commit(changes monitor.Changes, mark Mark) error {
	if changes.Position == 0 && empty(&changes) {
		return nil
	}
	return s.update("commit", func(tx *bolt.Tx, h *head) error {
		if err := takePosition(h, &changes, mark); err != nil {
			return err
		}
		if err := takeSeries(h, &changes); err != nil {
			return err
		}
		h.Commit++
		h.Renumbered = h.Renumbered && changes.Header == nil
		if mark.Position != 0 {
			if h.Stored == monitor.Beginning {
				h.FirstStored = mark.Stored
			}
			h.Stored = max(h.Stored, mark.Stored)
			if err := putMark(tx, h, mark); err != nil {
				return err
			}
		}
		return s.write(tx, h, &changes)
	})
}

func (s *Store) write(tx *bolt.Tx, h *head, changes *monitor.Changes) error {
	steps := []func() error{
		func() error { return writeHeader(tx, h, changes.Header) },
		func() error { return writeJournal(tx, h, changes) },
		func() error { return writeStates(tx, h, changes.States) },
		func() error { return writeIDs(tx, h, changes) },
		func() error { return writeArchive(tx, h, changes) },
		func() error { return writeRefused(tx, h, changes.Refused, s.opts.Retention) },
		func() error { return writeAlerts(tx, h, changes.Alerts) },
		func() error { return writeSteps(tx, h, changes.Steps) },
		func() error { return writeSettings(tx, h, changes.Settings) },
		func() error { return writeSummaries(tx, h, changes) },
	}
	for _, step := range steps {
		if err := step(); err != nil {
			return err
		}
	}
	return nil
}

func takePosition(h *head, changes *monitor.Changes, mark Mark) error {
	if mark.Position != 0 && mark.Position != changes.Position {
		return fmt.Errorf("the mark of position %d is given for position %d: %w",
			mark.Position, changes.Position, ErrPosition)
	}
	if changes.Position == 0 {
		return nil
	}
	if changes.Position <= h.Position {
		return fmt.Errorf("position %d is committed, %d is stored: %w", changes.Position, h.Position, ErrPosition)
	}
	h.Position = changes.Position
	return nil
}

func empty(c *monitor.Changes) bool {
	return c.Header == nil && len(c.Series) == 0 && len(c.States) == 0 && len(c.IDs) == 0 &&
		len(c.DroppedGenerations) == 0 && len(c.Archived) == 0 && len(c.Refused) == 0 && len(c.Alerts) == 0 &&
		len(c.Steps) == 0 && len(c.Settings) == 0 && len(c.Summaries) == 0 && len(c.Waiting) == 0 && len(c.Gathered) == 0
}
