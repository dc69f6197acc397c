package partition

import (
	"context"
	"errors"
	"path/filepath"
	"sync"
	"testing"
	"testing/synctest"
	"time"

	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/store"
)

const setupText = `
name = "loop"
folder = "x"
[time]
mode = "history"
[[indicator]]
name = "fall"
series = ["*/fall"]
unit = "bed-days"
every = "1d"
zone = "Europe/Berlin"
windows = ["7d"]
tails = ["upper"]
p_limit = 0.001
quiet = 3
[indicator.baseline]
kind = "known"
rate = 0.01
`

// lane is a source whose messages the test sends.
type lane struct {
	incoming chan monitor.Message
	failure  error
}

func (l *lane) Next(ctx context.Context, limit int) (Batch, error) {
	var b Batch
	add := func(m monitor.Message) {
		b.Messages = append(b.Messages, m)
		b.Mark = func(i int) store.Mark {
			return store.Mark{Position: b.Messages[i].Position, Stored: b.Messages[i].Stored}
		}
	}
	select {
	case m, open := <-l.incoming:
		if !open {
			return b, l.failure
		}
		add(m)
	case <-ctx.Done():
		return b, ctx.Err()
	}
	for len(b.Messages) < limit {
		select {
		case m, open := <-l.incoming:
			if !open {
				return b, nil
			}
			add(m)
		default:
			return b, nil
		}
	}
	return b, nil
}

// stage is a loop over a real store, and what it committed.
type stage struct {
	lane  *lane
	store *store.Store
	loop  *Loop
	mu    struct {
		sync.Mutex
		commits []uint64
	}
}

func newStage(t *testing.T, path string) *stage {
	t.Helper()
	id := store.Identity{Deployment: "loop", Partitions: 1, KeyParts: 1}
	st, err := store.Create(path, id, store.Options{})
	if err != nil {
		t.Fatal(err)
	}
	engine, err := Recover(st)
	if err != nil {
		t.Fatal(err)
	}
	s := &stage{lane: &lane{incoming: make(chan monitor.Message, 10_000)}, store: st}
	s.loop = New(engine, st, s.lane, Options{Committed: func(position uint64) {
		s.mu.Lock()
		defer s.mu.Unlock()
		s.mu.commits = append(s.mu.commits, position)
	}})
	return s
}

func (s *stage) commits() []uint64 {
	s.mu.Lock()
	defer s.mu.Unlock()
	return append([]uint64(nil), s.mu.commits...)
}

func settingMessage(t *testing.T) monitor.Message {
	t.Helper()
	setup, err := config.Parse([]byte(setupText), "set-up")
	if err != nil {
		t.Fatal(err)
	}
	return monitor.Message{Position: 1, Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}}
}

// day is a day's falls of a ward, as message number n.
func day(n int) monitor.Message {
	start := monitor.InstantOf(time.Date(2026, 1, n, 0, 0, 0, 0, time.UTC))
	return monitor.Message{Position: uint64(n + 1), Kind: monitor.Observations, Items: []monitor.Item{{
		Observation: monitor.Observation{
			Series: "ward/fall", Start: start, End: start.Add(time.Hour), HasEvents: true, HasExposure: true,
			Exposure: config.Decimal{Coef: 20}, Reported: start.Add(2 * time.Hour), HasReported: true,
		},
	}}}
}

// TestLoad checks that an idle stream is committed message by message, that a
// backlog is committed in few commits, and that ending the context commits
// what was applied.
func TestLoad(t *testing.T) {
	path := filepath.Join(t.TempDir(), "p.store")
	synctest.Test(t, func(t *testing.T) {
		s := newStage(t, path)
		ctx, stop := context.WithCancel(t.Context())
		ended := make(chan error, 1)
		go func() { ended <- s.loop.Run(ctx) }()
		s.lane.incoming <- settingMessage(t)
		for n := 1; n <= 3; n++ {
			synctest.Wait()
			s.lane.incoming <- day(n)
		}
		synctest.Wait()
		if got := s.commits(); len(got) != 4 || got[3] != 4 {
			t.Errorf("idle: committed at %v, want after each of 4 messages", got)
		}
		for n := 4; n <= 2003; n++ {
			s.lane.incoming <- day(n)
		}
		synctest.Wait()
		if got := s.commits(); got[len(got)-1] != 2004 || len(got) > 200 {
			t.Errorf("behind: %d commits for 2000 messages, the last at %d", len(got)-4, got[len(got)-1])
		}
		var elements int64
		if err := s.loop.Do(ctx, func(e *monitor.Engine) { elements = e.Account().Elements }); err != nil || elements != 2003 {
			t.Errorf("%d elements: %v", elements, err)
		}
		stop()
		if err := <-ended; err != nil {
			t.Errorf("stopped: %v", err)
		}
		if position, err := s.store.Position(); err != nil || position != 2004 {
			t.Errorf("stopped at %d: %v", position, err)
		}
		if err := s.store.Close(); err != nil {
			t.Error(err)
		}
	})
}

// TestFailures checks that a source or a store that fails ends the loop with
// its error, and that nothing is left running.
func TestFailures(t *testing.T) {
	t.Run("source", func(t *testing.T) {
		path := filepath.Join(t.TempDir(), "p.store")
		synctest.Test(t, func(t *testing.T) {
			s := newStage(t, path)
			s.lane.failure = errors.New("the stream is gone")
			s.lane.incoming <- settingMessage(t)
			close(s.lane.incoming)
			if err := s.loop.Run(t.Context()); !errors.Is(err, s.lane.failure) {
				t.Errorf("got %v", err)
			}
			if position, err := s.store.Position(); err != nil || position != 1 {
				t.Errorf("what came before was not committed: %d, %v", position, err)
			}
			if err := s.store.Close(); err != nil {
				t.Error(err)
			}
		})
	})
	t.Run("store", func(t *testing.T) {
		path := filepath.Join(t.TempDir(), "p.store")
		synctest.Test(t, func(t *testing.T) {
			s := newStage(t, path)
			if err := s.store.Close(); err != nil {
				t.Fatal(err)
			}
			s.lane.incoming <- settingMessage(t)
			if err := s.loop.Run(t.Context()); !errors.Is(err, store.ErrClosed) {
				t.Errorf("got %v", err)
			}
		})
	})
}

// TestAskedAfterTheEnd checks that nobody waits for a loop that has ended.
func TestAskedAfterTheEnd(t *testing.T) {
	path := filepath.Join(t.TempDir(), "p.store")
	synctest.Test(t, func(t *testing.T) {
		s := newStage(t, path)
		ctx, stop := context.WithCancel(t.Context())
		stop()
		if err := s.loop.Run(ctx); err != nil {
			t.Error(err)
		}
		if err := s.loop.Do(ctx, func(*monitor.Engine) { t.Error("ran") }); !errors.Is(err, context.Canceled) {
			t.Errorf("got %v", err)
		}
		if err := s.store.Close(); err != nil {
			t.Error(err)
		}
	})
}
