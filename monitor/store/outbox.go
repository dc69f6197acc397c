package store

import (
	"errors"
	"fmt"
	"slices"

	"tailbell/monitor/life"

	bolt "go.etcd.io/bbolt"
)

// Row is one alert step that outlets must deliver. Numbers run from 1.
type Row struct {
	Number uint64
	Notice life.Notice
}

// Start says where a new outlet begins.
type Start int

// The starts.
const (
	// FromEnd begins with the steps committed after the outlet was registered.
	FromEnd Start = iota
	// FromOldest begins with the oldest step that is still kept.
	FromOldest
)

// String returns the start in words.
func (s Start) String() string {
	switch s {
	case FromEnd:
		return "from the end"
	case FromOldest:
		return "from the oldest step kept"
	}
	return fmt.Sprintf("Start(%d)", int(s))
}

// Outlet is one way out with what it has yet to deliver.
type Outlet struct {
	Name string
	// Through is the number of the last step up to which all is done with:
	// delivered, passed over or let go.
	Through uint64
	// Depth is how many steps wait.
	Depth uint64
	// Skipped is how many steps people let go singly, ever.
	Skipped uint64
	// Told is how many steps were delivered, Passed how many were passed over
	// as the outlet is not told of them: of those up to Through.
	Told, Passed uint64
}

// cursor is the stored form of an outlet. Delivered is the number up to which
// all steps are done with. Skip are the numbers beyond it that people let go, in
// order; Skipped counts all of them, ever. Told and Passed are absent in stores
// that were written before they were counted: they then count from there on.
type cursor struct {
	Delivered uint64   `json:"delivered"`
	Skip      []uint64 `json:"skip,omitempty"`
	Skipped   uint64   `json:"skipped,omitempty"`
	Told      uint64   `json:"told,omitempty"`
	Passed    uint64   `json:"passed,omitempty"`
}

// count adds the steps up to number n, so many of which were passed over.
func (c *cursor) count(n, passed uint64) {
	steps := n - c.Delivered
	for _, k := range c.Skip {
		if k <= n {
			steps--
		}
	}
	passed = min(passed, steps)
	c.Passed += passed
	c.Told += steps - passed
}

// pass moves the cursor on, over what was let go too.
func (c *cursor) pass(n uint64) {
	c.Delivered = max(c.Delivered, n)
	for len(c.Skip) > 0 && c.Skip[0] <= c.Delivered+1 {
		c.Delivered = max(c.Delivered, c.Skip[0])
		c.Skip = c.Skip[1:]
	}
}

// Outlets registers outlets by name; one that is known keeps its place. Steps
// are kept until every registered outlet has delivered them; with none
// registered they are not kept.
func (s *Store) Outlets(start Start, names ...string) error {
	missing, err := s.unknownOutlets(names)
	if err != nil || len(missing) == 0 {
		return err
	}
	return s.update("outlets", func(tx *bolt.Tx, h *head) error {
		r, err := outletsShelf.in(tx)
		if err != nil {
			return err
		}
		for _, name := range missing {
			if name == "" {
				return fmt.Errorf("an outlet needs a name: %w", ErrNoOutlet)
			}
			if r.Get([]byte(name)) != nil {
				continue
			}
			c := cursor{Delivered: h.Outbox}
			if start == FromOldest {
				c.Delivered = h.OutboxFirst - 1
			}
			if err := r.putJSON([]byte(name), c); err != nil {
				return err
			}
			h.Outlets++
		}
		return nil
	})
}

func (s *Store) unknownOutlets(names []string) ([]string, error) {
	var missing []string
	err := s.view(func(tx *bolt.Tx) error {
		r, err := outletsShelf.in(tx)
		if err != nil {
			return err
		}
		for _, name := range names {
			if name == "" || r.Get([]byte(name)) == nil {
				missing = append(missing, name)
			}
		}
		return nil
	})
	return missing, err
}

// DropOutlet forgets an outlet. What only it had yet to deliver is let go.
func (s *Store) DropOutlet(name string) error {
	return s.update("drop outlet", func(tx *bolt.Tx, h *head) error {
		r, err := outletsShelf.in(tx)
		if err != nil {
			return err
		}
		if r.Get([]byte(name)) == nil {
			return fmt.Errorf("outlet %q: %w", name, ErrNoOutlet)
		}
		h.Outlets--
		return errors.Join(r.remove([]byte(name)), trimOutbox(tx, h, trimKeys))
	})
}

// OutletState returns the registered outlets by name.
func (s *Store) OutletState() ([]Outlet, error) {
	var outlets []Outlet
	since := s.tidings.all() // before the read begins, so that none is missed
	err := s.view(func(tx *bolt.Tx) error {
		h, err := readHead(tx)
		if err != nil {
			return err
		}
		return eachOutlet(tx, func(name string, c cursor) error {
			c = c.with(name, since)
			outlets = append(outlets, Outlet{
				Name: name, Through: c.Delivered, Depth: h.Outbox - c.Delivered - uint64(len(c.Skip)), Skipped: c.Skipped,
				Told: c.Told, Passed: c.Passed,
			})
			return nil
		})
	})
	return outlets, err
}

func eachOutlet(tx *bolt.Tx, use func(name string, c cursor) error) error {
	r, err := outletsShelf.in(tx)
	if err != nil {
		return err
	}
	return r.ForEach(func(key, value []byte) error {
		var c cursor
		if err := r.openJSON(key, value, &c); err != nil {
			return err
		}
		return use(string(key), c)
	})
}

// Pending returns at most max steps that an outlet has yet to deliver, oldest
// first.
func (s *Store) Pending(outlet string, max int) ([]Row, error) {
	return s.PendingAfter(outlet, 0, max)
}

// PendingAfter returns at most so many of those with numbers beyond after.
func (s *Store) PendingAfter(outlet string, after uint64, most int) ([]Row, error) {
	var rows []Row
	since := s.tidings.all() // before the read begins, so that none is missed
	err := s.view(func(tx *bolt.Tx) error {
		outlets, err := outletsShelf.in(tx)
		if err != nil {
			return err
		}
		var c cursor
		found, err := outlets.getJSON([]byte(outlet), &c)
		if err == nil && !found {
			err = fmt.Errorf("outlet %q: %w", outlet, ErrNoOutlet)
		}
		if err != nil {
			return err
		}
		c = c.with(outlet, since)
		r, err := outboxShelf.in(tx)
		if err != nil {
			return err
		}
		page, err := r.page(max(c.Delivered, after), false, min(most+len(c.Skip), pageRows))
		if err != nil {
			return err
		}
		page = slices.DeleteFunc(page, func(n uint64) bool { return slices.Contains(c.Skip, n) })
		for _, n := range page[:min(len(page), most)] {
			row := Row{Number: n}
			if _, err := r.getJSON(number(n), &row.Notice); err != nil {
				return err
			}
			rows = append(rows, row)
		}
		return nil
	})
	return rows, err
}

// Delivered notes that an outlet has delivered all steps up to number n, but for
// so many of those that waited until now, which were passed over. Saying it
// again, or of an earlier one, does nothing.
func (s *Store) Delivered(outlet string, n, passed uint64) error {
	return s.update("delivered", func(tx *bolt.Tx, h *head) error {
		r, err := outletsShelf.in(tx)
		if err != nil {
			return err
		}
		d := delivery{outlet, n, passed}
		if err := deliverable(r, h, d); err != nil {
			return err
		}
		return writeDelivery(tx, h, d)
	})
}

// maxSkip bounds how many steps of an outlet may be let go singly at once.
const maxSkip = 100

// Skip lets the step with a key go that waits for an outlet, because a person
// said so: it will not be delivered there. The others keep their order. It
// fails with ErrNotFound if no such step waits among the oldest thousands.
func (s *Store) Skip(outlet, key string) error {
	n, err := s.waiting(outlet, key)
	if err != nil {
		return err
	}
	return s.update("skip", func(tx *bolt.Tx, h *head) error {
		r, err := outletsShelf.in(tx)
		if err != nil {
			return err
		}
		var c cursor
		found, err := r.getJSON([]byte(outlet), &c)
		switch {
		case err != nil:
			return err
		case !found:
			return fmt.Errorf("outlet %q: %w", outlet, ErrNoOutlet)
		case n <= c.Delivered || slices.Contains(c.Skip, n):
			return fmt.Errorf("step %s waits for outlet %s no more: %w", key, outlet, ErrNotFound)
		case len(c.Skip) >= maxSkip:
			return fmt.Errorf("%d steps that wait for outlet %s were let go already: mend or drop it: %w", maxSkip, outlet, ErrOrder)
		}
		c.Skip = append(c.Skip, n)
		slices.Sort(c.Skip)
		c.Skipped++
		c.pass(c.Delivered)
		return errors.Join(r.putJSON([]byte(outlet), c), trimOutbox(tx, h, trimKeys))
	})
}

// skipPages is how many pages of the outbox are searched for a step.
const skipPages = 64

// waiting returns the number of the step with a key that waits for an outlet.
func (s *Store) waiting(outlet, key string) (number uint64, err error) {
	after := uint64(0)
	for range skipPages {
		rows, err := s.PendingAfter(outlet, after, pageRows)
		if err != nil {
			return 0, err
		}
		for i := range rows {
			if rows[i].Notice.Key == key {
				return rows[i].Number, nil
			}
			after = rows[i].Number
		}
		if len(rows) == 0 {
			break
		}
	}
	return 0, fmt.Errorf("no step %q waits for outlet %q: %w", key, outlet, ErrNotFound)
}

// writeSteps appends steps to the outbox.
func writeSteps(tx *bolt.Tx, h *head, steps []life.Notice) error {
	if len(steps) == 0 {
		return nil
	}
	r, err := outboxShelf.in(tx)
	if err != nil {
		return err
	}
	for i := range steps {
		h.Outbox++
		if err := r.putJSON(number(h.Outbox), &steps[i]); err != nil {
			return err
		}
	}
	if h.Outlets == 0 {
		return trimOutbox(tx, h, len(steps)+trimKeys)
	}
	return nil
}

// trimOutbox removes steps, at most limit, that every outlet has delivered.
func trimOutbox(tx *bolt.Tx, h *head, limit int) error {
	r, err := outboxShelf.in(tx)
	if err != nil {
		return err
	}
	done := h.Outbox
	err = eachOutlet(tx, func(_ string, c cursor) error {
		done = min(done, c.Delivered)
		return nil
	})
	if err != nil {
		return err
	}
	for ; h.OutboxFirst <= done && limit > 0; limit-- {
		if err := r.remove(number(h.OutboxFirst)); err != nil {
			return err
		}
		h.OutboxFirst++
	}
	return nil
}
