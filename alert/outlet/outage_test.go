package outlet_test

import (
	"context"
	"errors"
	"fmt"
	"math/rand/v2"
	"path/filepath"
	"slices"
	"strings"
	"sync/atomic"
	"testing"
	"testing/synctest"
	"time"

	"tailbell/alert/outlet"
	"tailbell/alert/outlet/outlettest"
	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/life"
	"tailbell/monitor/store"
)

func newStore(t *testing.T, names ...string) *store.Store {
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
	if err := st.Outlets(store.FromOldest, names...); err != nil {
		t.Fatal(err)
	}
	return st
}

// written are steps of alerts as an engine would hand them over.
type written struct {
	t        *testing.T
	st       *store.Store
	position uint64
	records  map[string]*life.Record
}

func newWritten(t *testing.T, st *store.Store) *written {
	t.Helper()
	return &written{t: t, st: st, records: map[string]*life.Record{}}
}

// commit writes steps of a kind on the units, taken at one time, in one commit.
func (w *written) commit(at time.Time, kinds []life.StepKind, units ...string) {
	w.t.Helper()
	w.position++
	var steps []life.Notice
	for _, unit := range units {
		r := w.records[unit]
		if r == nil {
			fresh := outlettest.Step(unit, life.StepOpened).Record
			r = &fresh
			r.Steps, r.Condition = nil, ""
			w.records[unit] = r
		}
		for _, kind := range kinds {
			took, err := r.Take(life.Step{Kind: kind, At: at, Evidence: &r.Opening})
			if err != nil {
				w.t.Fatal(err)
			}
			steps = append(steps, took...)
		}
	}
	if err := w.st.Commit(monitor.Changes{Position: w.position, Steps: steps}, store.Mark{}); err != nil {
		w.t.Fatal(err)
	}
}

// inOrder sees that every step of every alert is among what arrived, each after
// the one before it.
func (w *written) inOrder(arrived []outlettest.Arrival, key func(id, step string) string) {
	w.t.Helper()
	for _, r := range w.records {
		last := -1
		for n := range r.Steps {
			want := key(r.ID, life.Key(r.ID, n+1))
			at := slices.IndexFunc(arrived, func(a outlettest.Arrival) bool { return strings.Contains(a.ID, want) })
			if at <= last {
				w.t.Errorf("step %s arrived as number %d, the one before as number %d", want, at, last)
			}
			last = at
		}
	}
}

// TestOutage lets each receiver be away for hours, in a bubble where they pass
// at once; the receivers stand outside of it, behind real sockets.
func TestOutage(t *testing.T) {
	post, box := newMailServer(t, false), &inbox{}
	plain := mailOutlet(t, post)
	plain.Mail.Picture = config.NoPicture // drawn at each of hundreds of tries
	for _, c := range []struct {
		name     string
		outlet   outlet.Outlet
		receiver outlettest.Receiver
		key      func(id, step string) string
	}{
		{"mail", newMail(t, plain), post, func(_, step string) string { return step }},
		{"webhook", hook(t, box), box, func(_, step string) string { return strings.ReplaceAll(step, ".", "-") }},
	} {
		t.Run(c.name, func(t *testing.T) {
			synctest.Test(t, func(t *testing.T) {
				st := newStore(t, c.outlet.Name(), "other")
				w := newWritten(t, st)
				var tries atomic.Int64
				q := outlet.NewQueue(st, c.outlet, outlet.QueueOptions{
					Random: rand.New(rand.NewPCG(1, 2)), Now: time.Now, Failed: func(error, time.Duration) { tries.Add(1) },
				})
				ctx, cancel := context.WithCancel(t.Context())
				done := make(chan error)
				go func() { done <- q.Run(ctx) }()
				w.commit(outlettest.At, []life.StepKind{life.StepOpened}, "ward-1")
				q.Wake()
				time.Sleep(time.Minute)
				c.receiver.Down(true)
				for hour := range 6 {
					at := outlettest.At.Add(time.Duration(hour) * time.Hour)
					w.commit(at, []life.StepKind{life.StepWorsened}, "ward-1")
					w.commit(at.Add(time.Minute), []life.StepKind{life.StepOpened}, fmt.Sprintf("unit-%d", hour))
					q.Wake()
					time.Sleep(time.Hour)
				}
				w.commit(outlettest.At.Add(6*time.Hour), []life.StepKind{life.StepReturned}, "ward-1")
				synctest.Wait()
				if tr, n := q.Trouble(), int(tries.Load()); n < 100 || tr.Tries != n || tr.Next.Before(time.Now()) || time.Until(tr.Next) > time.Minute {
					t.Errorf("%d tries in six hours, trouble %+v", n, tr)
				}
				if waiting, first, more, err := q.Waiting(1000); err != nil || waiting != 13 || first != "award1.2" || more {
					t.Errorf("%d steps wait, the first %s, more %v, %v", waiting, first, more, err)
				}
				if n := len(c.receiver.Arrived()); n != 1 {
					t.Errorf("%d steps arrived during the outage", n-1)
				}
				c.receiver.Down(false)
				time.Sleep(2 * time.Minute)
				synctest.Wait()
				if arrived := c.receiver.Arrived(); len(arrived) != 14 {
					t.Errorf("%d steps arrived in the end", len(arrived))
				} else {
					w.inOrder(arrived, c.key)
				}
				if q.Trouble().Tries != 0 {
					t.Errorf("trouble at the end: %+v", q.Trouble())
				}
				cancel()
				if err := <-done; err != nil {
					t.Error(err)
				}
			})
		})
	}
}

// gathering takes steps together, and fails when told.
type gathering struct {
	inbox
	fail func(keys []string) bool
}

func (*gathering) Name() string { return "people" }

func (g *gathering) Deliver(ctx context.Context, n *life.Notice) error {
	return g.DeliverTogether(ctx, []*life.Notice{n})
}

func (g *gathering) DeliverTogether(_ context.Context, notices []*life.Notice) error {
	var keys []string
	for _, n := range notices {
		keys = append(keys, n.Key)
	}
	if g.fail != nil && g.fail(keys) {
		return errors.New("not now")
	}
	g.take(strings.Join(keys, " "), string(notices[0].Step.Kind))
	return nil
}

func (g *gathering) ids() []string {
	var ids []string
	for _, a := range g.Arrived() {
		ids = append(ids, a.ID)
	}
	return ids
}

// TestGathering sees which steps arrive as one notice, and that a failure in
// between brings nothing twice that this process knows to have arrived.
func TestGathering(t *testing.T) {
	st := newStore(t, "people")
	w := newWritten(t, st)
	at := outlettest.At
	w.commit(at, []life.StepKind{life.StepOpened}, "a1", "a2", "a3")
	w.commit(at, []life.StepKind{life.StepWorsened, life.StepReturned}, "a1", "a2")
	w.commit(at.Add(time.Hour), []life.StepKind{life.StepOpened}, "a4")
	failed := false
	g := &gathering{fail: func(keys []string) bool {
		if !failed && keys[0] == "aa1.3" { // the returned ones, at first
			failed = true
			return true
		}
		return false
	}}
	q := outlet.NewQueue(st, g, outlet.QueueOptions{Random: rand.New(rand.NewPCG(1, 2))})
	if err := q.Flush(t.Context()); err == nil {
		t.Fatal("no failure")
	}
	if err := q.Flush(t.Context()); err != nil {
		t.Fatal(err)
	}
	want := []string{"aa1.1 aa2.1 aa3.1", "aa1.2 aa2.2", "aa1.3 aa2.3", "aa4.1"}
	if got := g.ids(); !slices.Equal(got, want) {
		t.Errorf("got %q, want %q", got, want)
	}
}

// TestFlood gathers more steps than a notice tells of, and than are looked at
// at once.
func TestFlood(t *testing.T) {
	st := newStore(t, "people")
	w := newWritten(t, st)
	var units []string
	for i := range 330 {
		units = append(units, fmt.Sprintf("u%03d", i))
	}
	w.commit(outlettest.At.Add(-time.Hour), []life.StepKind{life.StepOpened}, "first")
	w.commit(outlettest.At, []life.StepKind{life.StepOpened}, units...)
	g := &gathering{}
	q := outlet.NewQueue(st, g, outlet.QueueOptions{Random: rand.New(rand.NewPCG(1, 2))})
	if err := q.Flush(t.Context()); err != nil {
		t.Fatal(err)
	}
	var sizes []int
	for _, id := range g.ids() {
		sizes = append(sizes, len(strings.Fields(id)))
	}
	if !slices.Equal(sizes, []int{1, 100, 100, 100, 30}) {
		t.Errorf("notices of %v steps", sizes)
	}
	w.inOrder(g.Arrived(), func(_, step string) string { return step })
}

// TestTold holds what an outlet is told against what its part of the set-up
// says.
func TestTold(t *testing.T) {
	all := config.Told{Upper: true, Lower: true}
	step := func(change func(*life.Notice)) *life.Notice {
		n := outlettest.Step("ward-3", life.StepWorsened)
		change(n)
		return n
	}
	plain := step(func(*life.Notice) {})
	for name, c := range map[string]struct {
		told func(*config.Told)
		step *life.Notice
		want bool
	}{
		"everything":         {func(*config.Told) {}, plain, true},
		"another indicator":  {func(t *config.Told) { t.Indicators = []string{"fall"} }, plain, false},
		"the indicator":      {func(t *config.Told) { t.Indicators = []string{"fall", "line-infection"} }, plain, true},
		"a pattern":          {func(t *config.Told) { t.Series = []config.Pattern{config.NewPattern("*/ward-*/*")} }, plain, true},
		"another pattern":    {func(t *config.Told) { t.Series = []config.Pattern{config.NewPattern("quillmere-quay/**")} }, plain, false},
		"the other tail":     {func(t *config.Told) { t.Upper = false }, plain, false},
		"strong enough":      {func(t *config.Told) { t.PAtMost = 0.03 }, plain, true},
		"too weak":           {func(t *config.Told) { t.PAtMost = 0.02 }, plain, false},
		"the kind":           {func(t *config.Told) { t.Steps = []string{"worsened"} }, plain, true},
		"another kind":       {func(t *config.Told) { t.Steps = []string{"reminder"} }, plain, false},
		"of history":         {func(*config.Told) {}, step(func(n *life.Notice) { n.History = true }), false},
		"history, wanted":    {func(t *config.Told) { t.History = true }, step(func(n *life.Notice) { n.History = true }), true},
		"for another outlet": {func(*config.Told) {}, step(func(n *life.Notice) { n.To = "lead" }), false},
		"for this outlet":    {func(*config.Told) {}, step(func(n *life.Notice) { n.To = "post" }), true},
		"on the shelf":       {func(*config.Told) {}, step(func(n *life.Notice) { n.Step.Condition = life.Shelved }), false},
	} {
		o := config.Outlet{Name: "post", Told: all}
		c.told(&o.Told)
		if got := outlet.Wants(&o)(c.step); got != c.want {
			t.Errorf("%s: told %v, want %v", name, got, c.want)
		}
	}
	// The set-up knows the words for all kinds of step.
	var kinds []string
	for _, k := range life.StepKinds {
		kinds = append(kinds, string(k))
	}
	if !slices.Equal(kinds, config.OutletSteps) {
		t.Errorf("config knows %q, life %q", config.OutletSteps, kinds)
	}
}

// TestPassedOver sees that what an outlet is not told does not wait for it.
func TestPassedOver(t *testing.T) {
	st := newStore(t, "people")
	w := newWritten(t, st)
	w.commit(outlettest.At, []life.StepKind{life.StepOpened}, "a1", "b1", "a2", "b2")
	g := &gathering{}
	q := outlet.NewQueue(st, g, outlet.QueueOptions{
		Random: rand.New(rand.NewPCG(1, 2)), Wants: func(n *life.Notice) bool { return strings.HasPrefix(n.Record.ID, "ab") },
	})
	if waiting, first, _, err := q.Waiting(100); waiting != 2 || first != "ab1.1" || err != nil {
		t.Errorf("%d wait, the first %s, %v", waiting, first, err)
	}
	if err := q.Flush(t.Context()); err != nil {
		t.Fatal(err)
	}
	state, err := st.OutletState()
	if got := g.ids(); err != nil || !slices.Equal(got, []string{"ab1.1 ab2.1"}) || state[0].Depth != 0 || state[0].Told != 2 || state[0].Passed != 2 {
		t.Errorf("got %q, state %+v, %v", got, state, err)
	}
}
