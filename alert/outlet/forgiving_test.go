package outlet

import (
	"context"
	"math/rand/v2"
	"path/filepath"
	"slices"
	"sync"
	"testing"
	"testing/synctest"
	"time"

	"tailbell/monitor"
	"tailbell/monitor/life"
	"tailbell/monitor/store"
)

// writes lists the writes of a store.
type writes struct {
	mu   sync.Mutex
	list []string
}

func (w *writes) note(step string) error {
	w.mu.Lock()
	defer w.mu.Unlock()
	w.list = append(w.list, step)
	return nil
}

// since returns the writes since it was called the last time.
func (w *writes) since() []string {
	w.mu.Lock()
	defer w.mu.Unlock()
	list := slices.DeleteFunc(w.list, func(step string) bool { return step != "commit durable" && step != "delivered durable" })
	w.list = nil
	return list
}

// TestForgiving sees that a delivery to a forgiving outlet takes no write of its
// own if another one comes, and one a little later if not, or at the end.
func TestForgiving(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		var w writes
		st, err := store.Create(filepath.Join(t.TempDir(), "s"),
			store.Identity{Deployment: "quillmere", Partitions: 1, KeyParts: 1}, store.Options{MapBytes: 1 << 20, Fault: w.note})
		if err != nil {
			t.Fatal(err)
		}
		if err := st.Outlets(store.FromOldest, BusName); err != nil {
			t.Fatal(err)
		}
		var took []string
		out := NewBus("quillmere", func(_ context.Context, p *Published) error {
			took = append(took, p.Key)
			return nil
		})
		q := NewQueue(st, out, QueueOptions{Random: rand.New(rand.NewPCG(1, 2))})
		ctx, stop := context.WithCancel(t.Context())
		done := make(chan error)
		go func() { done <- q.Run(ctx) }()
		position := uint64(0)
		commit := func(key string) {
			t.Helper()
			position++
			if err := st.Commit(monitor.Changes{Position: position, Steps: []life.Notice{{Key: key}}}, store.Mark{}); err != nil {
				t.Fatal(err)
			}
			q.Wake()
			synctest.Wait()
		}
		expect := func(when string, want ...string) {
			t.Helper()
			if got := w.since(); !slices.Equal(got, want) {
				t.Errorf("%s: the store wrote %q, want %q", when, got, want)
			}
		}
		w.since()
		commit("a.1")
		time.Sleep(lull / 2)
		commit("a.2")
		expect("while steps come", "commit durable", "commit durable")
		time.Sleep(2 * lull)
		synctest.Wait()
		expect("when none come", "delivered durable")
		time.Sleep(10 * lull)
		synctest.Wait()
		expect("afterwards")
		commit("a.3")
		stop()
		if err := <-done; err != nil {
			t.Error(err)
		}
		expect("at the end", "commit durable", "delivered durable")
		if want := []string{"a.1", "a.2", "a.3"}; !slices.Equal(took, want) {
			t.Errorf("delivered were %q, want %q", took, want)
		}
		if err := st.Close(); err != nil {
			t.Error(err)
		}
	})
}
