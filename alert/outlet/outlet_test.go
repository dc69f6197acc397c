package outlet

import (
	"context"
	"errors"
	"fmt"
	"math/rand/v2"
	"path/filepath"
	"testing"
	"testing/synctest"
	"time"

	"tailbell/monitor"
	"tailbell/monitor/life"
	"tailbell/monitor/store"
)

// flaky fails as often as told, then takes what comes.
type flaky struct {
	failures int
	took     []string
}

func (*flaky) Name() string { return "flaky" }

func (f *flaky) Deliver(_ context.Context, n *life.Notice) error {
	if f.failures > 0 {
		f.failures--
		return errors.New("down")
	}
	f.took = append(f.took, n.Key)
	return nil
}

// waiting returns a store with n steps that wait for the outlet.
func waiting(t *testing.T, n int) *store.Store {
	t.Helper()
	st, err := store.Create(filepath.Join(t.TempDir(), "s"),
		store.Identity{Deployment: "quillmere", Partitions: 1, KeyParts: 1}, store.Options{MapBytes: 1 << 20})
	if err != nil {
		t.Fatal(err)
	}
	t.Cleanup(func() {
		if err := st.Close(); err != nil {
			t.Error(err)
		}
	})
	if err := st.Outlets(store.FromOldest, "flaky"); err != nil {
		t.Fatal(err)
	}
	var steps []life.Notice
	for i := range n {
		steps = append(steps, life.Notice{Key: fmt.Sprintf("a.%d", i+1)})
	}
	if err := st.Commit(monitor.Changes{Position: 1, Steps: steps}, store.Mark{}); err != nil {
		t.Fatal(err)
	}
	return st
}

// TestBackOff holds the pauses between tries against what they may be, shows
// the trouble meanwhile, and sees that nothing is skipped.
func TestBackOff(t *testing.T) {
	synctest.Test(t, func(t *testing.T) {
		st := waiting(t, 250)
		f := &flaky{failures: 12}
		var pauses []time.Duration
		var q *Queue
		q = NewQueue(st, f, QueueOptions{
			Random: rand.New(rand.NewPCG(1, 2)),
			Failed: func(_ error, pause time.Duration) {
				pauses = append(pauses, pause)
				if tr := q.Trouble(); tr.Tries != len(pauses) || tr.Error != "down" || tr.Pause != pause {
					t.Errorf("trouble %+v", tr)
				}
			},
		})
		ctx, cancel := context.WithCancel(t.Context())
		done := make(chan error)
		go func() { done <- q.Run(ctx) }()
		time.Sleep(time.Hour)
		synctest.Wait()
		if len(f.took) != 250 || f.took[0] != "a.1" || f.took[249] != "a.250" {
			t.Errorf("took %d steps", len(f.took))
		}
		if (q.Trouble() != Trouble{}) {
			t.Errorf("trouble at the end: %+v", q.Trouble())
		}
		full, halves := firstPause, 0
		for i, p := range pauses {
			if p < full/2 || p > full {
				t.Errorf("pause %d is %s, not within %s to %s", i+1, p, full/2, full)
			}
			if p == full {
				halves++
			}
			full = min(2*full, longestPause)
		}
		if len(pauses) != 12 || halves == len(pauses) {
			t.Errorf("no jitter in %v", pauses)
		}
		cancel()
		if err := <-done; err != nil {
			t.Error(err)
		}
	})
}
