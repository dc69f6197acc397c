package store

import (
	"errors"
	"slices"
	"testing"

	"tailbell/monitor"
)

// through is the number up to which an outlet is done with all, as anyone is told.
func through(t *testing.T, s *Store, outlet string) uint64 {
	t.Helper()
	all, err := s.OutletState()
	if err != nil {
		t.Fatal(err)
	}
	for _, o := range all {
		if o.Name == outlet {
			return o.Through
		}
	}
	t.Fatalf("there is no outlet %s", outlet)
	return 0
}

// TestDeliveredSoon sees that what is told soon is known at once, durable with the
// next write of any kind, and undone by a crash before that.
func TestDeliveredSoon(t *testing.T) {
	s := create(t, Options{})
	if err := s.Outlets(FromOldest, "bus", "ward"); err != nil {
		t.Fatal(err)
	}
	mustCommit(t, s, monitor.Changes{Position: 1, Steps: notices(1, 5)}, Mark{})
	if err := errors.Join(s.DeliveredSoon("bus", 2, 1), s.DeliveredSoon("bus", 1, 1), s.DeliveredSoon("bus", 3, 0)); err != nil {
		t.Fatal(err)
	}
	if got, want := keys(t, s, "bus", 10), []string{"1.3", "1.4"}; !slices.Equal(got, want) {
		t.Errorf("the outlet waits for %v, want %v", got, want)
	}
	if err := s.Skip("bus", "1.2"); !errors.Is(err, ErrNotFound) {
		t.Errorf("letting go of what was delivered gave %v, want ErrNotFound", err)
	}
	if s = reopen(t, s); through(t, s, "bus") != 0 {
		t.Errorf("after a crash all up to %d is done with", through(t, s, "bus"))
	}
	if err := errors.Join(s.DeliveredSoon("bus", 2, 1), s.DeliveredSoon("bus", 3, 0)); err != nil {
		t.Fatal(err)
	}
	mustCommit(t, s, monitor.Changes{Position: 2}, Mark{})
	s = reopen(t, s)
	state, err := s.OutletState()
	want := []Outlet{{"bus", 3, 2, 0, 2, 1}, {"ward", 0, 5, 0, 0, 0}}
	if err != nil || !slices.Equal(state, want) {
		t.Errorf("OutletState gave %v, %v; want %v", state, err, want)
	}
	if err := errors.Join(s.DeliveredSoon("ward", 5, 0), s.Delivered("bus", 5, 0)); err != nil {
		t.Fatal(err)
	}
	if report, err := s.Check(t.Context()); err != nil || report.OutboxRows != 0 {
		t.Errorf("%d rows are kept for nobody, %v", report.OutboxRows, err)
	}
}

func TestKeepDelivered(t *testing.T) {
	s := create(t, Options{})
	if err := s.Outlets(FromOldest, "bus", "ward"); err != nil {
		t.Fatal(err)
	}
	mustCommit(t, s, monitor.Changes{Position: 1, Steps: notices(1, 2)}, Mark{})
	broken, steps := errors.New("broken"), []string{}
	fail := true
	s.fault = func(step string) error {
		steps = append(steps, step)
		if fail && step == "commit written" {
			return broken
		}
		return nil
	}
	if err := s.DeliveredSoon("bus", 2, 0); err != nil {
		t.Fatal(err)
	}
	if err := s.Commit(monitor.Changes{Position: 2}, Mark{}); !errors.Is(err, broken) {
		t.Fatalf("a broken commit gave %v", err)
	}
	fail, steps = false, nil
	if err := errors.Join(s.KeepDelivered(), s.KeepDelivered()); err != nil {
		t.Fatal(err)
	}
	if want := []string{"delivered", "delivered written", "delivered durable"}; !slices.Equal(steps, want) {
		t.Errorf("keeping it twice took the steps %q, want %q", steps, want)
	}
	s.fault = nil
	if s = reopen(t, s); through(t, s, "bus") != 2 {
		t.Errorf("all up to %d is done with", through(t, s, "bus"))
	}
	// One that is forgotten has no say in what is written then.
	if err := errors.Join(s.DeliveredSoon("ward", 1, 0), s.DropOutlet("ward"), s.DeliveredSoon("bus", 2, 0), s.KeepDelivered()); err != nil {
		t.Error(err)
	}
	if err := s.DeliveredSoon("ward", 1, 0); !errors.Is(err, ErrNoOutlet) {
		t.Errorf("a delivery by nobody gave %v", err)
	}
	if err := s.DeliveredSoon("bus", 3, 0); !errors.Is(err, ErrOrder) {
		t.Errorf("a delivery of what never was gave %v", err)
	}
}
