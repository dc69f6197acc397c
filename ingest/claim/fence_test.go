package claim

import (
	"context"
	"errors"
	"fmt"
	"strings"
	"testing"
	"testing/synctest"

	"tailbell/ingest/bus"
)

// fences returns fences of owners with their epochs over one log.
func fences(resume bool, origins ...string) (*world, []*Fence) {
	w := quiet("a")
	var list []*Fence
	for i, origin := range origins {
		list = append(list, NewFence(&view{w.members[0]}, 0, uint64(i+1), origin, resume))
	}
	return w, list
}

func step(row uint64) *Step {
	return &Step{Row: row, Key: fmt.Sprint("step ", row), Event: []byte("{}")}
}

func (w *world) published() string {
	var list []string
	for _, m := range w.log[0] {
		text := m.id
		if text == "" {
			text = fmt.Sprint("mark ", m.Epoch)
		}
		list = append(list, text)
	}
	return strings.Join(list, ", ")
}

func TestFenceEndsWithTheNextOwner(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		ctx := context.Background()
		w, f := fences(true, "in", "in")
		for row := uint64(1); row <= 3; row++ {
			if err := f[0].Publish(ctx, step(row)); err != nil {
				t.Fatal(err)
			}
		}
		if err := f[1].Take(ctx); err != nil {
			t.Fatal(err)
		}
		for range 2 { // for ever
			if err := f[0].Publish(ctx, step(4)); !errors.Is(err, ErrStale) {
				t.Errorf("the first owner: %v", err)
			}
		}
		if err := f[0].Take(ctx); !errors.Is(err, ErrStale) {
			t.Errorf("the first owner again: %v", err)
		}
		for row := uint64(1); row <= 5; row++ { // from the beginning, as with an old copy
			if err := f[1].Publish(ctx, step(row)); err != nil {
				t.Fatal(err)
			}
		}
		if row, key := f[1].Row(); row != 5 || key != "step 5" {
			t.Errorf("row %d, %s", row, key)
		}
		if got, want := w.published(), "mark 1, step 1, step 2, step 3, mark 2, step 4, step 5"; got != want {
			t.Errorf("published: %s\nwant: %s", got, want)
		}
	})
}

// TestFenceKnowsItsOwn lets messages vanish and acknowledgements get lost.
func TestFenceKnowsItsOwn(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		ctx := context.Background()
		w, f := fences(true, "in")
		if err := f[0].Publish(ctx, step(1)); err != nil {
			t.Fatal(err)
		}
		w.log[0] = append(w.log[0], logged{bus.Published{Position: 3, Epoch: 1, Row: 2, Origin: "in", Key: "step 2"}, "step 2"}) // its acknowledgement was lost
		for row := uint64(2); row <= 3; row++ {
			if err := f[0].Publish(ctx, step(row)); err != nil {
				t.Fatal(err)
			}
		}
		w.log[0] = nil // somebody has emptied the stream
		if err := f[0].Publish(ctx, step(4)); err != nil {
			t.Fatal(err)
		}
		if err := f[0].Publish(ctx, &Step{Key: "a test", Event: []byte("{}")}); err != nil {
			t.Fatal(err)
		}
		if err := f[0].Publish(ctx, step(4)); err != nil {
			t.Fatal(err)
		}
		if got, want := w.published(), "step 4, a test"; got != want {
			t.Errorf("published: %s\nwant: %s", got, want)
		}
	})
}

// TestFenceWithoutResume publishes again what the store has not delivered, as one
// process that works alone does; another stream's rows are nobody's.
func TestFenceWithoutResume(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		ctx := context.Background()
		w, f := fences(false, "in", "in")
		for i := range f {
			if err := f[i].Publish(ctx, step(1)); err != nil {
				t.Fatal(err)
			}
		}
		if got, want := w.published(), "mark 1, step 1, mark 2, step 1"; got != want {
			t.Errorf("published: %s\nwant: %s", got, want)
		}
		w, f = fences(true, "in", "another")
		for i := range f {
			if err := f[i].Publish(ctx, step(1)); err != nil {
				t.Fatal(err)
			}
		}
		if got, want := w.published(), "mark 1, step 1, mark 2, step 1"; got != want {
			t.Errorf("of another stream: %s\nwant: %s", got, want)
		}
	})
}

// TestFenceTellsStoresApart follows an owner whose store had other steps.
func TestFenceTellsStoresApart(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		ctx := context.Background()
		_, f := fences(true, "in", "in")
		if err := f[0].Publish(ctx, &Step{Row: 1, Key: "another step", Event: []byte("{}")}); err != nil {
			t.Fatal(err)
		}
		if err := f[1].Publish(ctx, step(1)); !errors.Is(err, ErrApart) || !strings.Contains(err.Error(), "another step") {
			t.Errorf("the first time: %v", err)
		}
		for row := uint64(1); row <= 2; row++ {
			if err := f[1].Publish(ctx, step(row)); err != nil {
				t.Errorf("then: %v", err)
			}
		}
	})
}
