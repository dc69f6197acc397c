package claim

import (
	"context"
	"errors"
	"fmt"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"tailbell/ingest/bus"
)

// quiet is a world without faults, in which every process takes its turns in
// time.
func quiet(folders ...string) *world {
	w := &world{
		random: rand.New(rand.NewPCG(1, 1)), began: time.Now(), entries: map[string]bus.Entry{}, calm: true,
		log: map[int][]logged{}, steps: map[int]uint64{}, owners: map[int][]uint64{},
	}
	for _, folder := range folders {
		w.members = append(w.members, &process{w: w, folder: folder, stores: map[int]uint64{}})
	}
	return w
}

// pass lets time pass; those processes take their turns that are not stopped.
func (w *world) pass(t *testing.T, d time.Duration) {
	t.Helper()
	for end := time.Now().Add(d); time.Now().Before(end); {
		for _, p := range w.members {
			if p.k == nil || p.stop {
				continue
			}
			if err := p.k.Turn(context.Background()); err != nil {
				t.Fatal(err)
			}
			p.take()
		}
		time.Sleep(span / 6)
	}
}

func (w *world) held() string {
	var counts []string
	for _, p := range w.members {
		n := 0
		for part := range partitions {
			if p.k != nil && !p.stop && p.k.Holds(part) {
				n++
			}
		}
		counts = append(counts, fmt.Sprint(n))
	}
	return strings.Join(counts, " ")
}

func (w *world) want(t *testing.T, held string) {
	t.Helper()
	if got := w.held(); got != held {
		t.Errorf("after %v they hold %s, want %s", time.Since(w.began), got, held)
	}
}

// TestShares follows members through starts, silence and leave.
func TestShares(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		w := quiet("a", "b", "c")
		w.members[0].start()
		w.pass(t, span)
		w.want(t, "4 0 0")
		w.members[1].start()
		w.pass(t, span)
		w.want(t, "2 2 0")
		w.members[2].start()
		w.pass(t, 2*span)
		if got := w.held(); !slices.Contains([]string{"2 2 0", "2 1 1", "1 2 1"}, got) { // nobody more than two
			t.Errorf("three hold %s", got)
		}
		w.members[0].stop = true // it falls silent
		w.pass(t, span-span/6)
		w.pass(t, span/2)
		w.want(t, "0 2 2")
		b := w.members[1]
		if err := b.k.Leave(context.Background()); err != nil {
			t.Fatal(err)
		}
		w.pass(t, span/3) // it is not counted any more, but keeps what it has
		w.want(t, "0 2 2")
		for n := range partitions {
			if err := b.k.Release(context.Background(), n); err != nil {
				t.Fatal(err)
			}
		}
		w.pass(t, span/3)
		w.want(t, "0 0 4")
		w.members[0].start() // an earlier start on its folder owns nothing any more
		w.pass(t, 2*span)
		w.want(t, "2 0 2")
		w.members[2].start() // killed and started again: its own are gone on with at once
		w.pass(t, span/6)
		w.want(t, "2 0 2")
	})
}

// TestAlone starts a second process where the first shares with nobody.
func TestAlone(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		w := quiet("a", "b", "a")
		start := func(i int) *Keeper {
			p := w.members[i]
			p.start()
			p.k.o.Alone = true
			return p.k
		}
		start(0)
		w.pass(t, 2*span)
		w.want(t, "4 0 0")
		second := start(1)
		var err error
		for n := 0; err == nil && n < 12; n++ {
			err = second.Turn(context.Background())
			if first := w.members[0].k.Turn(context.Background()); first != nil {
				t.Fatal(first)
			}
			time.Sleep(span / 6)
		}
		if !errors.Is(err, ErrOwned) || !strings.Contains(err.Error(), "a-1") {
			t.Errorf("a second one: %v", err)
		}
		w.members[1].stop, w.members[0].stop = true, true
		w.members[2].starts = 1
		start(2) // on the same folder, whose lock it has
		w.pass(t, span/6)
		w.want(t, "0 0 4")
		w.members[2].stop = true
		start(1)
		w.pass(t, span/2)
		w.want(t, "0 0 0")
		w.pass(t, span)
		w.want(t, "0 4 0")
	})
}

// TestAnotherSetupWaits starts a process of another set-up.
func TestAnotherSetupWaits(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		w := quiet("a", "b")
		w.members[0].start()
		w.pass(t, span)
		b := w.members[1]
		b.start()
		b.k.o.Digest = "two"
		w.pass(t, 3*span)
		w.want(t, "4 0")
		if why := b.k.Waits(); !strings.Contains(why, "a-1 owns partition") {
			t.Errorf("it says %q", why)
		}
		a := w.members[0]
		for n := range partitions {
			if err := a.k.Release(context.Background(), n); err != nil {
				t.Fatal(err)
			}
		}
		a.stop = true
		w.pass(t, span/6)
		w.want(t, "0 4")
		if why := b.k.Waits(); why != "" {
			t.Errorf("it says %q", why)
		}
		a.start() // now this one waits
		w.pass(t, 3*span)
		w.want(t, "0 4")
		rows, err := Look(t.Context(), &view{b})
		if err != nil || len(rows) != partitions || rows[2].Owner != b.k.Name() || rows[2].Digest != "two" || rows[2].Epoch != 2 {
			t.Errorf("%+v, %v", rows, err)
		}
	})
}

// TestRaise raises the epoch of what is owned.
func TestRaise(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		w := quiet("a")
		w.members[0].start()
		w.pass(t, span)
		k := w.members[0].k
		for _, at := range []struct{ least, want uint64 }{{0, 1}, {9, 9}, {5, 9}} {
			if got, err := k.Raise(t.Context(), 2, at.least); err != nil || got != at.want {
				t.Errorf("at least %d: %d, %v", at.least, got, err)
			}
		}
		if err := k.Release(t.Context(), 2); err != nil {
			t.Fatal(err)
		}
		if _, err := k.Raise(t.Context(), 2, 20); !errors.Is(err, ErrStale) {
			t.Errorf("what is not owned: %v", err)
		}
	})
}
