package monitor

import (
	"encoding/json"
	"errors"
	flags "flag"
	"fmt"
	"maps"
	"math/rand/v2"
	"runtime"
	"slices"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"

	"tailbell/monitor/life"
)

var (
	twinSeed    = flags.Uint64("twin.seed", 0, "compare engine and twin over the stream of this seed only")
	twinStreams = flags.Int("twin.streams", 300, "over how many random streams engine and twin are compared")
	twinLength  = flags.Int("twin.length", 45, "messages in each of those streams")
	twinShrink  = flags.Bool("twin.shrink", true, "leave out what a disagreement does not need")
	twinFrom    = flags.Uint64("twin.from", 1, "the first of their seeds")
)

// TestTwin compares the engine with a slow twin after every message of random
// streams, and an undisturbed engine with one that is drained and restarted
// at random.
func TestTwin(t *testing.T) {
	if *twinSeed != 0 {
		*twinFrom, *twinStreams = *twinSeed, 1
	}
	defer func(n int) { maxStale = n }(maxStale)
	maxStale = 1 // so that generations of ids are written anew all the time
	shards := runtime.GOMAXPROCS(0)
	totals := make([]twinTotals, shards)
	t.Run("streams", func(t *testing.T) {
		for shard := range shards {
			t.Run(fmt.Sprint(shard), func(t *testing.T) {
				t.Parallel()
				for i := shard; i < *twinStreams && !t.Failed(); i += shards {
					runTwin(t, *twinFrom+uint64(i), &totals[shard])
				}
			})
		}
	})
	var sum twinTotals
	for _, x := range totals {
		sum.add(x)
	}
	t.Logf("%d streams from seed %d: %+v", *twinStreams, *twinFrom, sum)
	if !t.Failed() && *twinStreams >= 300 {
		for kind, n := range map[string]int{
			"alerts": sum.Alerts, "late alerts": sum.Late, "lower alerts": sum.Lower, "withdrawals": sum.Withdrawn,
			"corrections": sum.Corrected, "returns": sum.Returned, "worsenings": sum.Worsened, "restarts": sum.Restarts,
		} {
			if n < 40 {
				t.Errorf("only %d %s: the streams test too little", n, kind)
			}
		}
	}
}

// twinTotals says how much was compared.
type twinTotals struct {
	Messages, Elements, Refused, Looks                                             int
	Alerts, Late, Lower, Steps, Worsened, Corrected, Returned, Withdrawn, Restarts int
}

func (x *twinTotals) add(y twinTotals) {
	x.Messages += y.Messages
	x.Elements += y.Elements
	x.Refused += y.Refused
	x.Looks += y.Looks
	x.Alerts += y.Alerts
	x.Late += y.Late
	x.Lower += y.Lower
	x.Steps += y.Steps
	x.Worsened += y.Worsened
	x.Corrected += y.Corrected
	x.Returned += y.Returned
	x.Withdrawn += y.Withdrawn
	x.Restarts += y.Restarts
}

func runTwin(t *testing.T, seed uint64, totals *twinTotals) {
	t.Helper()
	messages := newTwinStream(t, seed).write(*twinLength)
	err := safely(func() error { return compareTwin(messages, seed, totals) })
	if err == nil {
		return
	}
	small := messages
	if *twinShrink {
		small = shrink(messages, seed)
	}
	t.Errorf("seed %d (-twin.seed=%d): %v\nshrunk to %d of %d messages: %v\n%s", seed, seed, err,
		len(small), len(messages), safely(func() error { return compareTwin(small, seed, &twinTotals{}) }), tell(small))
}

// safely turns a panic into an error, so that such a stream can be shrunk.
func safely(f func() error) (err error) {
	defer func() {
		if p := recover(); p != nil {
			stack := make([]byte, 4096)
			err = fmt.Errorf("panic: %v\n%s", p, stack[:runtime.Stack(stack, false)])
		}
	}()
	return f()
}

// shrink leaves out messages and elements that the disagreement does not
// need.
func shrink(messages []Message, seed uint64) []Message {
	fails := func(m []Message) bool {
		return safely(func() error { return compareTwin(m, seed, &twinTotals{}) }) != nil
	}
	for again := true; again; {
		again = false
		for i := len(messages) - 1; i > 0; i-- {
			if less := slices.Delete(slices.Clone(messages), i, i+1); fails(less) {
				messages, again = less, true
				continue
			}
			for j := len(messages[i].Items) - 1; j >= 0 && len(messages[i].Items) > 1; j-- {
				less := slices.Clone(messages)
				less[i].Items = slices.Delete(slices.Clone(less[i].Items), j, j+1)
				if fails(less) {
					messages, again = less, true
				}
			}
		}
	}
	return messages
}

// tell writes messages as people read them.
func tell(messages []Message) string {
	var b strings.Builder
	for i := range messages {
		m := &messages[i]
		fmt.Fprintf(&b, "#%d stored %s", m.Position, at(m.Stored))
		if m.HasTime {
			fmt.Fprintf(&b, " time %s", at(m.Time))
		}
		switch m.Kind {
		case Observations:
			for _, it := range m.Items {
				o := it.Observation
				fmt.Fprintf(&b, "\n    %s id %q.%d retracted %v, %s to %s, events %d (%v), exposure %s (%v) %s", o.Series, o.ID, o.Revision,
					o.Retracted, at(o.Start), at(o.End), o.Events, o.HasEvents, o.Exposure, o.HasExposure, it.Reason)
				if o.HasReported {
					fmt.Fprintf(&b, " reported %s", at(o.Reported))
				}
			}
		case ActMessage:
			fmt.Fprintf(&b, " %s %q %q %s, has at %v", m.Act.Kind, m.Act.Alert, m.Act.Series, m.Act.Direction, m.Act.HasAt)
		case SettingMessage:
			fmt.Fprintf(&b, " set-up\n%s", m.Setting.Setup.Text)
		case SummaryMessage: // there is one partition
		case Tick:
			b.WriteString(" tick")
		case Live:
			b.WriteString(" live")
		case Rejected:
			b.WriteString(" rejected")
		}
		b.WriteByte('\n')
	}
	return b.String()
}

// compareTwin says where engine and twin, or an undisturbed and a restarted
// engine, disagree.
func compareTwin(messages []Message, seed uint64, totals *twinTotals) error {
	part := Partition{Of: 1} // its series lie in one, whatever their names are: counts are in force at once
	e, w := New(part), newTwin()
	rng := rand.New(rand.NewPCG(seed, 99))
	disturbed, store := New(part), NewMemory()
	told := 0 // how many steps are compared already
	for i := range messages {
		m := &messages[i]
		e.Apply(m)
		w.apply(m)
		if err := agree(e, w, &told); err != nil {
			return fmt.Errorf("at message %d: %w", m.Position, err)
		}
		disturbed.Apply(m)
		switch x := rng.Float64(); {
		case x < 0.3 || m.Kind == SettingMessage: // a commit holds one set-up
			store.Commit(disturbed.Drain())
		case x < 0.5:
			store.Commit(disturbed.Drain())
			totals.Restarts++
			var err error
			if disturbed, err = store.Reopen(part); err != nil {
				return fmt.Errorf("reopening after message %d: %w", m.Position, err)
			}
		}
	}
	totals.count(w)
	store.Commit(disturbed.Drain())
	return sameOutcome(e, disturbed, store)
}

func (x *twinTotals) count(w *twin) {
	x.Messages += int(w.position)
	x.Elements += int(w.account.Elements)
	x.Refused += int(w.account.Refused)
	x.Looks += int(w.account.Looks)
	x.Steps += len(w.steps)
	for _, s := range w.steps {
		switch s.kind {
		case life.StepOpened:
			x.Alerts++
			if s.alert.late {
				x.Late++
			}
			if s.alert.d == lower {
				x.Lower++
			}
		case life.StepWorsened:
			x.Worsened++
		case life.StepCorrected:
			x.Corrected++
		case life.StepReturned:
			x.Returned++
		case life.StepWithdrawn:
			x.Withdrawn++
		case life.StepAcknowledged, life.StepClosed, life.StepNote, life.StepMarked,
			life.StepShelved, life.StepUnshelved, life.StepReminder, life.StepTest:
		}
	}
}

// sameOutcome compares what the two engines leave, to the byte.
func sameOutcome(e, disturbed *Engine, store *Memory) error {
	alone := NewMemory()
	account, slots, alerts, clock := e.Account(), e.Slots(), e.Alerts(), e.Clock()
	alone.Commit(e.Drain())
	for _, x := range []struct {
		what      string
		want, got any
	}{
		{"clock", clock, disturbed.Clock()},
		{"steps", alone.Steps, store.Steps},
		{"refusals", alone.Refused, store.Refused},
		{"records", alone.Records, store.Records},
		{"account", account, disturbed.Account()},
		{"slots", slots, disturbed.Slots()},
		{"alerts", alerts, disturbed.Alerts()},
		{"archive", alone.Archive, store.Archive},
	} {
		want, err := json.Marshal(x.want)
		if err != nil {
			return err
		}
		got, err := json.Marshal(x.got)
		if err != nil {
			return err
		}
		if string(want) != string(got) {
			return fmt.Errorf("%s (-undisturbed +restarted):\n%s", x.what, cmp.Diff(x.want, x.got))
		}
	}
	return nil
}

// agree compares engine and twin as they stand, and the steps not yet told.
func agree(e *Engine, w *twin, told *int) error {
	if e.clock != w.clock && w.started {
		return fmt.Errorf("clock: engine %s, twin %s", at(e.clock), at(w.clock))
	}
	account := e.Account()
	if !account.Balanced() {
		return fmt.Errorf("the account does not balance: %+v", account)
	}
	if diff := cmp.Diff(w.balance(), account, cmpopts.IgnoreFields(Account{}, "Reruns")); diff != "" {
		return fmt.Errorf("account (-twin +engine):\n%s", diff)
	}
	if len(e.refused) != len(w.refusals) {
		return fmt.Errorf("refusals: engine %d, twin %d", len(e.refused), len(w.refusals))
	}
	for i, r := range e.refused {
		if (twinRefusal{r.Position, r.Index, r.Reason}) != w.refusals[i] {
			return fmt.Errorf("refusal %d: engine %+v, twin %+v", i, r, w.refusals[i])
		}
	}
	if len(e.series) != len(w.order) {
		return fmt.Errorf("series: engine %d, twin %d", len(e.series), len(w.order))
	}
	for i, s := range e.series {
		if err := agreeSeries(s, w.order[i]); err != nil {
			return fmt.Errorf("series %s: %w", s.name, err)
		}
	}
	if err := agreeSteps(e, w, *told); err != nil {
		return err
	}
	*told = len(e.steps)
	return nil
}

func agreeSteps(e *Engine, w *twin, told int) error {
	var errs []error
	for i := told; i < max(len(e.steps), len(w.steps)); i++ {
		var got, want string
		if i < len(e.steps) {
			got = tellNotice(&e.steps[i])
		}
		if i < len(w.steps) {
			want = w.steps[i].tell()
		}
		if got != want {
			errs = append(errs, fmt.Errorf("step %d\n  engine %s\n  twin   %s", i, got, want))
		}
	}
	return errors.Join(errs...)
}

func tellNotice(n *life.Notice) string {
	r := &n.Record
	text := fmt.Sprintf("%s %s %s#%d (%s, opened %s, late %v, %s) at %s by %q why %q", n.Step.Kind, r.Series, r.Direction, r.Number,
		n.Step.Condition, at(InstantOf(r.Opened)), r.Late, r.ID, at(InstantOf(n.Step.At)), n.Step.By, n.Step.Why)
	if n.Step.Evidence != nil {
		text += "\n    on " + tellEvidence(n.Step.Evidence)
	}
	if n.Step.Kind == life.StepOpened {
		text += fmt.Sprintf(" ids %v +%d", r.IDs, r.MoreIDs)
	}
	return text + "\n    opening " + tellEvidence(&r.Opening) + "\n    worst " + tellEvidence(&r.Worst)
}

func tellEvidence(ev *life.Evidence) string {
	return fmt.Sprintf("%s to %s, %d (late %d) in %s, p %v %v", ev.Window, at(InstantOf(ev.To)), ev.Events, ev.LateEvents, ev.Exposure, ev.P, ev.Log10P)
}

func (x *twinStep) tell() string {
	a := x.alert
	s := a.series
	text := fmt.Sprintf("%s %s %s#%d (%s, opened %s, late %v, %s) at %s by %q why %q", x.kind, s.name, a.d.name(), a.number,
		x.condition, at(InstantOf(a.opened)), a.late, alertID(s.name, a.d, a.opened, a.number), at(InstantOf(x.at)), x.by, x.why)
	if x.evidence != nil {
		text += "\n    on " + x.evidence.tell(a)
	}
	if x.kind == life.StepOpened {
		n := min(maxIDs, len(a.ids))
		text += fmt.Sprintf(" ids %v +%d", a.ids[:n], len(a.ids)-n)
	}
	return text + "\n    opening " + x.opening.tell(a) + "\n    worst " + x.worst.tell(a)
}

func (ev *twinEvidence) tell(a *twinAlert) string {
	ix := a.series.ix
	return fmt.Sprintf("%s to %s, %d (late %d) in %s, p %v %v", ix.cfg().Windows[ev.key.window].Name, at(ix.slots.start(ev.key.boundary)),
		ev.events, ev.late, Quantity{Lo: uint64(ev.exposure)}.decimal(ix.cfg().GrainDigits), ev.p[a.d].p, ev.p[a.d].log10)
}

// agreeSeries compares slots and looks.
func agreeSeries(s *series, t *twinSeries) error {
	ix := s.indicator
	if ix.looked != t.ix.looked || s.birth != t.birth {
		return fmt.Errorf("looked %d, birth %d; twin %d, %d", ix.looked, s.birth, t.ix.looked, t.birth)
	}
	for i := range s.cells {
		c, x := &s.cells[i], t.sums[s.cells[i].slot]
		if x == nil {
			x = &twinSum{}
		}
		got := twinSum{c.events, c.late, int64(c.exposure.Lo), int(c.saysEvents), int(c.saysExposure), s.eventIDs.of(c.slot)}
		if c.exposure.Hi != 0 || !slices.Equal(got.ids, x.ids) || got.saysEvents != x.saysEvents ||
			got.saysExposure != x.saysExposure || got.events != x.events || got.late != x.late || got.exposure != x.exposure {
			return fmt.Errorf("slot %d: engine %+v, twin %+v", c.slot, got, *x)
		}
	}
	for slot := range t.sums {
		if _, ok := s.cells.find(slot); !ok && slot >= ix.floor {
			return fmt.Errorf("slot %d is not held", slot)
		}
	}
	for boundary := ix.looked; !t.ix.frozen(boundary) && boundary > s.birth; boundary-- {
		cfg := ix.epochAt(boundary).cfg
		for w := range cfg.Windows {
			got := s.limitsAt(cfg, w, boundary)
			if want := [2]float64{t.limitAt(cfg, boundary, w, upper), t.limitAt(cfg, boundary, w, lower)}; got != want {
				return fmt.Errorf("limits of %s at boundary %d: engine %v, twin %v", cfg.Windows[w].Name, boundary, got, want)
			}
		}
	}
	for _, d := range bothTails {
		if err := agreeLit(s, t, d); err != nil {
			return err
		}
	}
	return nil
}

// agreeLit compares the looks inside the horizon that signal, and whose they
// are.
func agreeLit(s *series, t *twinSeries, d direction) error {
	type lit struct {
		events, exposure int64
		log10            float64
		alert            string
	}
	got, want := map[lookKey]lit{}, map[lookKey]lit{}
	for _, l := range s.tails[d].lit {
		if t.ix.frozen(l.boundary) {
			continue
		}
		x := lit{l.events, int64(l.exposure.Lo), l.log10p, ""}
		if l.alert != nil {
			x.alert = l.alert.record.ID
		}
		got[lookKey{l.boundary, l.window}] = x
	}
	for key, l := range t.looks {
		if !l.lit[d] || t.ix.frozen(key.boundary) {
			continue
		}
		x := lit{l.events, l.exposure, l.p[d].log10, ""}
		if a := t.tails[d].owner[key]; a != nil {
			x.alert = alertID(t.name, d, a.opened, a.number)
		}
		want[key] = x
	}
	if !maps.Equal(got, want) {
		return fmt.Errorf("%s looks that signal: engine %+v, twin %+v", d.name(), got, want)
	}
	return nil
}
