package partition

import (
	"context"
	"errors"
	"fmt"
	"path/filepath"
	"strings"
	"testing"
	"testing/synctest"
	"time"

	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/store"
)

// acrossText has falls judged by their peers, wherever they lie.
const acrossText = `
name = "loop"
folder = "x"
partitions = 2
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
kind = "peers"
span = "7d"
refresh = "1d"
`

// wardIn is the name of a ward whose falls lie in a partition of two.
func wardIn(partition int) string {
	for n := 0; ; n++ {
		if name := fmt.Sprintf("ward-%d/fall", n); config.PartitionOf(name, 1, 2) == partition {
			return name
		}
	}
}

// days are the messages of a partition: the set-up, and so many days' falls.
func days(t *testing.T, partition, n int) []monitor.Message {
	t.Helper()
	setup, err := config.Parse([]byte(acrossText), "set-up")
	if err != nil {
		t.Fatal(err)
	}
	all := []monitor.Message{{Position: 1, Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}}}
	for i := 1; i <= n; i++ {
		m := day(i)
		m.Items[0].Observation.Series = wardIn(partition)
		all = append(all, m)
	}
	return all
}

// told is what partition 1 tells partition 0 in its days, from a position on, if it
// waits for nobody.
func told(t *testing.T, n int, from uint64) (all []monitor.Message) {
	t.Helper()
	e := monitor.New(monitor.Partition{Number: 1, Of: 2, KeyParts: 1})
	for _, m := range days(t, 1, n) {
		e.Apply(&m)
		for _, s := range e.Drain().Summaries {
			summary, err := monitor.DecodeSummary(s.Data)
			if err != nil {
				t.Fatal(err)
			}
			all = append(all, monitor.Message{Position: from + uint64(len(all)), Kind: monitor.SummaryMessage, Summary: summary})
		}
	}
	return all
}

// horn brings what was found ahead.
type horn struct {
	messages chan monitor.Message
	closed   bool
}

func (h *horn) Next(ctx context.Context, _ int) ([]monitor.Message, error) {
	select {
	case m := <-h.messages:
		return []monitor.Message{m}, nil
	case <-ctx.Done():
		return nil, ctx.Err()
	}
}

func (h *horn) Close() error {
	h.closed = true
	return nil
}

// waiter is a loop of partition 0 of two.
type waiter struct {
	lane   *lane
	horn   *horn
	after  []uint64 // from where it was read ahead
	store  *store.Store
	loop   *Loop
	stands []Stand
	stop   context.CancelFunc
	ended  chan error
}

func (w *waiter) start(t *testing.T, path string, o Options) {
	t.Helper()
	id := store.Identity{Deployment: "loop", Partitions: 2, KeyParts: 1}
	open := store.Open
	if w.lane == nil {
		open = store.Create
	}
	var err error
	if w.store, err = open(path, id, store.Options{}); err != nil {
		t.Fatal(err)
	}
	engine, err := Recover(w.store)
	if err != nil {
		t.Fatal(err)
	}
	w.lane, w.horn, w.stands = &lane{incoming: make(chan monitor.Message, 10_000)}, &horn{messages: make(chan monitor.Message, 100)}, nil
	o.Ahead = func(_ context.Context, after uint64) (Ahead, error) {
		w.after = append(w.after, after)
		return w.horn, nil
	}
	o.Moved = func(s Stand) { w.stands = append(w.stands, s) }
	w.loop = New(engine, w.store, w.lane, o)
	var ctx context.Context
	ctx, w.stop = context.WithCancel(t.Context())
	w.ended = make(chan error, 1)
	go func() { w.ended <- w.loop.Run(ctx) }()
}

// end ends the loop; the next one goes on from what is stored.
func (w *waiter) end(t *testing.T) {
	t.Helper()
	w.stop()
	if err := errors.Join(<-w.ended, w.store.Close()); err != nil {
		t.Fatal(err)
	}
}

func (w *waiter) last() Stand {
	if len(w.stands) == 0 {
		return Stand{}
	}
	return w.stands[len(w.stands)-1]
}

// TestMessagesWait lets partition 0 read ten days of history of which the other has
// told nothing yet: it stands before the day that needs that, commits what it has,
// answers, and goes on after a restart when it finds what was told far ahead. What it
// took from there is not taken again when the reading comes to it.
func TestMessagesWait(t *testing.T) {
	path := filepath.Join(t.TempDir(), "p.store")
	mine, theirs := days(t, 0, 10), told(t, 10, 100)
	if len(theirs) < 8 {
		t.Fatalf("the other one tells only %d times", len(theirs))
	}
	synctest.Test(t, func(t *testing.T) {
		w := &waiter{}
		w.start(t, path, Options{MaxBatch: 3})
		for _, m := range mine {
			w.lane.incoming <- m
		}
		synctest.Wait()
		stood := w.last()
		if !stood.Waits || stood.Position == 0 || stood.Position > 4 || stood.Ahead != 0 {
			t.Errorf("it stands at %+v", stood)
		}
		if left := len(w.lane.incoming); left < len(mine)-9 {
			t.Errorf("it has read on while it waits: %d of %d messages are left", left, len(mine))
		}
		var waitsFor []int
		if err := w.loop.Do(t.Context(), func(e *monitor.Engine) { waitsFor = e.WaitsFor() }); err != nil || len(waitsFor) != 1 || waitsFor[0] != 1 {
			t.Errorf("it waits for %v: %v", waitsFor, err)
		}
		if rows, err := w.store.Told(0, 100); err != nil || len(rows) == 0 {
			t.Errorf("the other one can't hear what it waits for: %d rows, %v", len(rows), err)
		}
		if position, err := w.store.Position(); err != nil || position != stood.Position {
			t.Errorf("position %d is stored: %v", position, err)
		}
		w.end(t)
		if !w.horn.closed {
			t.Error("what reads ahead was left open")
		}

		// From the store on, with half of what it waits for.
		w.start(t, path, Options{MaxBatch: 3})
		for _, m := range mine[stood.Position:] {
			w.lane.incoming <- m
		}
		half := len(theirs) / 2
		for _, m := range theirs[:half] {
			w.horn.messages <- m
		}
		synctest.Wait()
		again := w.last()
		if !again.Waits || again.Position <= stood.Position || again.Ahead != theirs[half-1].Position {
			t.Errorf("with half of it, it stands at %+v", again)
		}
		w.end(t)

		// The rest; and then the reading comes to all of it.
		w.start(t, path, Options{MaxBatch: 3})
		for _, m := range mine[again.Position:] {
			w.lane.incoming <- m
		}
		for _, m := range theirs[half:] {
			w.horn.messages <- m
		}
		synctest.Wait()
		if end := w.last(); end.Waits || end.Position != uint64(len(mine)) {
			t.Errorf("with all of it, it stands at %+v", end)
		}
		for _, m := range theirs {
			w.lane.incoming <- m
		}
		synctest.Wait()
		var account monitor.Account
		if err := w.loop.Do(t.Context(), func(e *monitor.Engine) { account = e.Account() }); err != nil ||
			account.Elements != 10 || account.Counted != 10 || account.Summaries != int64(len(theirs)) || account.SummaryRepeats != 0 {
			t.Errorf("%+v, %v", account, err)
		}
		if end := w.last(); end.Position != theirs[len(theirs)-1].Position {
			t.Errorf("it ends at %+v", end)
		}
		w.end(t)
		if want := fmt.Sprint([]uint64{stood.Position, max(stood.Position, stood.Ahead), max(again.Position, again.Ahead)}); fmt.Sprint(w.after) != want {
			t.Errorf("it was read ahead from %v, want %s", w.after, want)
		}
	})
}

// TestWaitingWithoutAhead checks that a loop that can't look ahead says so instead of
// standing for ever, and that one whose look ahead fails ends with that.
func TestWaitingWithoutAhead(t *testing.T) {
	gone := errors.New("the stream is gone")
	for name, ahead := range map[string]func(context.Context, uint64) (Ahead, error){
		errNoAhead.Error(): nil,
		gone.Error():       func(context.Context, uint64) (Ahead, error) { return nil, gone },
	} {
		path := filepath.Join(t.TempDir(), "p.store")
		synctest.Test(t, func(t *testing.T) {
			st, err := store.Create(path, store.Identity{Deployment: "loop", Partitions: 2, KeyParts: 1}, store.Options{})
			if err != nil {
				t.Fatal(err)
			}
			engine, err := Recover(st)
			if err != nil {
				t.Fatal(err)
			}
			source := &lane{incoming: make(chan monitor.Message, 100)}
			for _, m := range days(t, 0, 10) {
				source.incoming <- m
			}
			ctx, stop := context.WithTimeout(t.Context(), time.Hour)
			defer stop()
			if err := New(engine, st, source, Options{Ahead: ahead}).Run(ctx); err == nil || !strings.Contains(err.Error(), name) {
				t.Errorf("got %v, want %s", err, name)
			}
			if position, err := st.Position(); err != nil || position == 0 {
				t.Errorf("what came before was not committed: %d, %v", position, err)
			}
			if err := st.Close(); err != nil {
				t.Error(err)
			}
		})
	}
}
