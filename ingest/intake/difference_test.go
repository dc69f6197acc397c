package intake

import (
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/bus/bustest"
	"tailbell/monitor"
	"tailbell/monitor/store"
)

// desk is a bus and a store that reads from it.
type desk struct {
	t     *testing.T
	setup *config.Setup
	bus   *bus.Bus
	store *store.Store
}

func newDesk(t *testing.T) *desk {
	t.Helper()
	d := &desk{t: t, setup: bustest.Setup(t)}
	d.bus = bustest.Open(t, d.setup)
	var err error
	d.store, err = store.Create(filepath.Join(t.TempDir(), "s"),
		store.Identity{Deployment: "quillmere", Partitions: 1, KeyParts: 1}, store.Options{MapBytes: 1 << 20})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if err := d.store.Close(); err != nil {
			t.Error(err)
		}
	})
	d.verify()
	return d
}

func (d *desk) verify() {
	d.t.Helper()
	if err := Verify(d.t.Context(), d.bus, d.store); err != nil {
		d.t.Fatal(err)
	}
}

// publish stores messages and returns the position of the last.
func (d *desk) publish(n int, text string) {
	d.t.Helper()
	for i := range n {
		if _, err := d.bus.Publish(d.t.Context(), bus.Outgoing{Data: fmt.Appendf(nil, "%s %d", text, i)}); err != nil {
			d.t.Fatal(err)
		}
	}
}

// take commits the messages up to a position, one by one.
func (d *desk) take(to uint64) {
	d.t.Helper()
	from, err := d.store.Position()
	if err != nil {
		d.t.Fatal(err)
	}
	for p := from + 1; p <= to; p++ {
		raw, err := d.bus.At(d.t.Context(), p)
		if err != nil {
			d.t.Fatal(err)
		}
		if err := d.store.Commit(monitor.Changes{Position: p}, markOf(&raw)); err != nil {
			d.t.Fatal(err)
		}
	}
}

// copied saves the bus as it stands.
func (d *desk) copied() string {
	d.t.Helper()
	to := filepath.Join(d.t.TempDir(), "copy")
	d.reopen(func() {
		if err := os.CopyFS(to, os.DirFS(d.setup.Folder)); err != nil {
			d.t.Fatal(err)
		}
	})
	return to
}

func (d *desk) reopen(meanwhile func()) {
	d.t.Helper()
	if err := d.bus.Close(); err != nil {
		d.t.Fatal(err)
	}
	meanwhile()
	d.bus = bustest.Open(d.t, d.setup)
}

func (d *desk) difference() *DifferenceError {
	d.t.Helper()
	err := Verify(d.t.Context(), d.bus, d.store)
	var diff *DifferenceError
	if !errors.As(err, &diff) || !errors.Is(err, ErrOtherStream) || !strings.Contains(err.Error(), "store accept") {
		d.t.Fatalf("got %v", err)
	}
	return diff
}

// accept takes the stream in place of the old one, and checks where reading
// goes on.
func (d *desk) accept(diff *DifferenceError, want uint64) {
	d.t.Helper()
	cut, err := diff.Cut(d.t.Context(), d.bus)
	if err != nil || cut != want {
		d.t.Fatalf("cut at %d, %v, want %d", cut, err, want)
	}
	if err := d.store.AcceptStream(diff.Now, cut); err != nil {
		d.t.Fatal(err)
	}
	d.verify()
}

func TestStreamThatLostItsTail(t *testing.T) {
	d := newDesk(t)
	d.publish(20, "first")
	saved := d.copied()
	d.publish(15, "lost")
	d.take(30)
	d.reopen(func() { d.setup.Folder = saved })
	diff := d.difference()
	if diff.Kind != Short || diff.Last != 20 || diff.Position != 30 || diff.Agreed < 15 || diff.Agreed > 20 ||
		!strings.Contains(diff.Error(), "positions 21 to 30 (10 messages)") {
		t.Errorf("%+v", diff)
	}
	d.accept(diff, 20)
}

// TestStreamThatWasFilledAgain loses its tail, but publishers fill it beyond
// the stored position, with the same bytes: the end and the digests say
// nothing, the stored times do.
func TestStreamThatWasFilledAgain(t *testing.T) {
	for _, text := range []string{"lost", "other"} {
		d := newDesk(t)
		d.publish(20, "first")
		saved := d.copied()
		d.publish(15, "lost")
		d.take(30)
		d.reopen(func() { d.setup.Folder = saved })
		d.publish(40, text)
		diff := d.difference()
		if diff.Kind != Changed || diff.Last != 60 || diff.Position != 30 || diff.Agreed < 15 || diff.Agreed > 20 || diff.At <= 20 {
			t.Errorf("%+v", diff)
		}
		d.accept(diff, 20)
	}
}

func TestStreamThatWasMadeAnew(t *testing.T) {
	d := newDesk(t)
	d.publish(5, "first")
	d.take(5)
	d.reopen(func() { d.setup.Folder = t.TempDir() })
	diff := d.difference()
	if diff.Kind != Recreated || diff.Position != 5 || diff.Last != 0 {
		t.Errorf("%+v", diff)
	}
	d.accept(diff, 0)

	d.publish(5, "second")
	d.take(5)
	d.reopen(func() { d.setup.Folder = t.TempDir() })
	d.publish(9, "third")
	d.accept(d.difference(), 0) // all of it is new
}

func TestStreamThatGrew(t *testing.T) {
	d := newDesk(t)
	d.publish(200, "first")
	d.take(180)
	d.reopen(func() {})
	d.verify()
	d.take(200)
	d.verify()
}
