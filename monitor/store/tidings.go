package store

import (
	"fmt"
	"slices"
	"sync"

	bolt "go.etcd.io/bbolt"
)

// tidings are what outlets said of their deliveries that no write has made
// durable yet.
type tidings struct {
	mu   sync.Mutex
	list []delivery // guarded by mu, oldest first
}

// delivery says that an outlet is done with all steps up to a number, so many of
// which were passed over.
type delivery struct {
	outlet         string
	number, passed uint64
}

func (t *tidings) all() []delivery {
	t.mu.Lock()
	defer t.mu.Unlock()
	return slices.Clone(t.list)
}

func (t *tidings) add(d delivery) {
	t.mu.Lock()
	defer t.mu.Unlock()
	t.list = append(t.list, d)
}

// written forgets the oldest ones: a write has made them durable.
func (t *tidings) written(n int) {
	t.mu.Lock()
	defer t.mu.Unlock()
	t.list = slices.Delete(t.list, 0, n)
}

// DeliveredSoon is Delivered for an outlet whose receiver drops repeats: everyone
// who asks is told at once, but it becomes durable with the next write of any
// kind, or by KeepDelivered. Until then a crash undoes it, and the steps are
// delivered again.
//
// So a delivery does not stand in the way of the commit that comes next.
func (s *Store) DeliveredSoon(outlet string, n, passed uint64) error {
	err := s.view(func(tx *bolt.Tx) error {
		h, err := readHead(tx)
		if err != nil {
			return err
		}
		r, err := outletsShelf.in(tx)
		if err != nil {
			return err
		}
		return deliverable(r, &h, delivery{outlet, n, passed})
	})
	if err == nil {
		s.tidings.add(delivery{outlet, n, passed})
	}
	return err
}

// KeepDelivered makes durable what DeliveredSoon was told, unless another write
// has.
func (s *Store) KeepDelivered() error {
	if len(s.tidings.all()) == 0 {
		return nil
	}
	return s.update("delivered", func(*bolt.Tx, *head) error { return nil })
}

// deliverable checks that an outlet can have delivered what it says.
func deliverable(r rack, h *head, d delivery) error {
	switch {
	case r.Get([]byte(d.outlet)) == nil:
		return fmt.Errorf("outlet %q: %w", d.outlet, ErrNoOutlet)
	case d.number > h.Outbox:
		return fmt.Errorf("outlet %q says it delivered step %d, the last one is %d: %w", d.outlet, d.number, h.Outbox, ErrOrder)
	}
	return nil
}

// writeTidings writes what outlets said before a write and returns how much that
// was. Those that were dropped meanwhile have no say.
func (s *Store) writeTidings(tx *bolt.Tx, h *head) (int, error) {
	all := s.tidings.all()
	for _, d := range all {
		if err := writeDelivery(tx, h, d); err != nil {
			return 0, err
		}
	}
	return len(all), nil
}

func writeDelivery(tx *bolt.Tx, h *head, d delivery) error {
	r, err := outletsShelf.in(tx)
	if err != nil {
		return err
	}
	var c cursor
	found, err := r.getJSON([]byte(d.outlet), &c)
	if err != nil || !found {
		return err
	}
	if c.take(&d) {
		if err := r.putJSON([]byte(d.outlet), c); err != nil {
			return err
		}
	}
	return trimOutbox(tx, h, trimKeys)
}

// take moves the cursor on over a delivery, and reports whether that was news.
func (c *cursor) take(d *delivery) bool {
	if d.number <= c.Delivered {
		return false
	}
	c.count(d.number, d.passed)
	c.pass(d.number)
	return true
}

// with returns the outlet's cursor as it stands with what was said since it was
// written.
func (c cursor) with(outlet string, since []delivery) cursor {
	c.Skip = slices.Clone(c.Skip)
	for i := range since {
		if since[i].outlet == outlet {
			c.take(&since[i])
		}
	}
	return c
}
