package monitor

import (
	flags "flag"
	"fmt"
	"math/rand/v2"
	"slices"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"tailbell/config"
	"tailbell/exact"
	"tailbell/monitor/life"
)

var arrivalSeed = flags.Uint64("arrival-seed", 0, "play the arrivals of this seed only")

const arrivalSetup = `
name = "reference"
folder = "x"
[time]
mode = "history"
[[indicator]]
name = "fall"
series = ["a/*"]
unit = "bed-days"
every = "%s"
zone = "Europe/Berlin"
events = "each"
exposure = "clock"
clock = { size = 1, per = "1d" }
settle = "%s"
horizon = "20d"
ahead = "2d"
windows = ["2d", "5d"]
looks = "arrival"
p_limit = %v
quiet = 2
[indicator.baseline]
kind = "known"
rate = %v
`

// arrivalStream is a random stream of events of one series.
type arrivalStream struct {
	setup    *config.Setup
	rate     float64
	limit    float64
	settle   time.Duration
	messages []Message
}

func newArrivalStream(t *testing.T, seed uint64, corrected bool) *arrivalStream {
	t.Helper()
	rng := rand.New(rand.NewPCG(seed, 7))
	x := &arrivalStream{rate: 0.2 + rng.Float64(), limit: []float64{0.3, 0.1, 0.02}[rng.IntN(3)]}
	x.settle = []time.Duration{0, 6 * time.Hour, 48 * time.Hour}[rng.IntN(3)]
	text := fmt.Sprintf(arrivalSetup, []string{"1d", "1h"}[rng.IntN(2)], config.FormatDuration(x.settle), x.limit, x.rate)
	var err error
	if x.setup, err = config.Parse([]byte(text), "set-up"); err != nil {
		t.Fatal(err)
	}
	x.add(Message{Kind: SettingMessage, Setting: Setting{Setup: x.setup}})
	start := InstantOf(time.Date(2026, 3, 20, 5, 0, 0, 0, time.UTC)) // the clocks go forward within
	now, id := start, 0
	revisions := map[string]int64{}
	for range 120 {
		now += Instant(rng.ExpFloat64() * float64(day) / x.rate / 2)
		if rng.IntN(5) == 0 {
			now += Instant(rng.Int64N(6 * day))
		}
		o := Observation{Series: "a/b", ID: fmt.Sprint(id), Start: now, End: now, Instant: true, Events: 1, HasEvents: true}
		id++
		if corrected {
			o.Events = rng.Int64N(4)
			o.Start -= Instant(rng.Int64N(3)) * Instant(rng.Int64N(15*day)) / 2
			o.Start += Instant(rng.Int64N(2) * rng.Int64N(2*day))
			if rng.IntN(4) == 0 { // at a moment that others have too
				o.Start -= o.Start % Instant(12*hour)
			}
			o.End = o.Start
			if id > 3 && rng.IntN(3) == 0 {
				o.ID = fmt.Sprint(id - 1 - rng.IntN(3))
				o.Retracted = rng.IntN(2) == 0
			}
			revisions[o.ID]++
			o.Revision = revisions[o.ID]
			if o.Retracted {
				o = Observation{Series: "a/b", ID: o.ID, Revision: o.Revision, Retracted: true}
			}
		}
		x.add(Message{Kind: Observations, HasTime: true, Time: now, Items: []Item{{Observation: o}}})
	}
	x.add(Message{Kind: Tick, HasTime: true, Time: now + Instant(9*day)})
	return x
}

func (x *arrivalStream) add(m Message) {
	m.Position = uint64(len(x.messages) + 1)
	x.messages = append(x.messages, m)
}

// arrivalBook is what stands, kept in the simplest way: the events by id.
type arrivalBook struct {
	said  map[string]Observation
	birth Instant
}

// lit lists the looks that must signal, of those that can change or were made.
func (b *arrivalBook) lit(x *arrivalStream, e *Engine) map[string]int64 {
	ix := e.indicators[0]
	lit := map[string]int64{}
	for _, o := range b.said {
		slot := ix.cal.Slot(o.Start)
		if o.Events == 0 || o.Start > e.clock || slot+1 <= ix.frozenAt {
			continue
		}
		for _, days := range []int64{2, 5} {
			from := o.Start - Instant(days*day)
			n := b.between(from, o.Start)
			if from >= b.birth && x.signals(n, float64(days)) {
				lit[fmt.Sprintf("%d days to %d", days, o.Start)] = n
			}
		}
	}
	return lit
}

// between counts the events in (from, to].
func (b *arrivalBook) between(from, to Instant) int64 {
	var n int64
	for _, o := range b.said {
		if from < o.Start && o.Start <= to {
			n += o.Events
		}
	}
	return n
}

// signals reports whether so many events in so many days are past the limit.
func (x *arrivalStream) signals(n int64, days float64) bool {
	return n > 0 && exact.AtMost(exact.Poisson{Rate: x.rate, Exposure: days}.Upper(n), x.limit)
}

func arrivalSeeds(n uint64) []uint64 {
	if *arrivalSeed != 0 {
		return []uint64{*arrivalSeed}
	}
	seeds := make([]uint64, n)
	for i := range seeds {
		seeds[i] = uint64(i) + 1
	}
	return seeds
}

// TestArrivalLooks holds the looks that signal after each message against all
// looks computed anew from what stands, on streams with late, several, moved,
// taken back and future events; and the steps against those of an engine that
// is restored again and again.
func TestArrivalLooks(t *testing.T) {
	kinds := map[life.StepKind]int{}
	for _, seed := range arrivalSeeds(60) {
		x := newArrivalStream(t, seed, true)
		holdLooks(t, seed, x.messages, kinds, func(i int, e *Engine, book *arrivalBook) { compareArrivals(t, seed, i, x, e, book) })
	}
	checkTame(t, kinds)
}

// holdLooks plays a stream, compares what signals after each message, and holds
// the steps against those of an engine that is restored again and again. It counts
// the steps.
func holdLooks(t *testing.T, seed uint64, messages []Message, kinds map[life.StepKind]int, compare func(i int, e *Engine, book *arrivalBook)) {
	t.Helper()
	rng := rand.New(rand.NewPCG(seed, 8))
	p := Partition{Of: 1, KeyParts: 1}
	plain, again := NewMemory(), NewMemory()
	e, restored := New(p), New(p)
	book := &arrivalBook{said: map[string]Observation{}, birth: Never}
	for i := range messages {
		m := &messages[i]
		e.Apply(m)
		restored.Apply(m)
		if rng.IntN(4) == 0 {
			again.Commit(restored.Drain())
			var err error
			if restored, err = again.Reopen(p); err != nil {
				t.Fatalf("seed %d, message %d: %v", seed, i+1, err)
			}
		}
		refused := len(e.refused)
		plain.Commit(e.Drain())
		if m.Kind == Observations && refused == 0 {
			book.take(&m.Items[0].Observation, e)
		}
		if m.Kind != SettingMessage {
			compare(i, e, book)
		}
	}
	again.Commit(restored.Drain())
	if diff := cmp.Diff(plain.Steps, again.Steps); diff != "" {
		t.Fatalf("seed %d (-undisturbed +restored):\n%s", seed, diff)
	}
	for _, n := range plain.Steps {
		kinds[n.Step.Kind]++
	}
}

// checkTame fails if the streams had too few steps of a kind.
func checkTame(t *testing.T, kinds map[life.StepKind]int) {
	t.Helper()
	for _, k := range []life.StepKind{life.StepOpened, life.StepWorsened, life.StepCorrected, life.StepReturned, life.StepWithdrawn} {
		if *arrivalSeed == 0 && kinds[k] < 20 {
			t.Errorf("only %d steps %q: the streams are too tame", kinds[k], k)
		}
	}
}

func (b *arrivalBook) take(o *Observation, e *Engine) {
	if o.Retracted {
		delete(b.said, o.ID)
		return
	}
	b.said[o.ID] = *o
	ix := e.indicators[0]
	b.birth = min(b.birth, ix.cal.Start(ix.cal.Slot(o.Start)))
}

func compareArrivals(t *testing.T, seed uint64, i int, x *arrivalStream, e *Engine, book *arrivalBook) {
	t.Helper()
	got := map[string]int64{}
	frozen := e.indicators[0].frozenAt
	for _, s := range e.series {
		for _, l := range s.tails[upper].lit {
			if l.boundary > frozen {
				days := []int64{2, 5}[l.window]
				got[fmt.Sprintf("%d days to %d", days, l.occasion.at)] = l.events
			}
		}
	}
	if diff := cmp.Diff(book.lit(x, e), got); diff != "" {
		t.Fatalf("seed %d, after message %d, the looks that signal (-want +got):\n%s", seed, i+1, diff)
	}
}

// TestArrivalLife holds the times at which alerts open and return against a
// simple walk, on streams of single events that come when they happen.
func TestArrivalLife(t *testing.T) {
	opened := 0
	for _, seed := range arrivalSeeds(60) {
		x := newArrivalStream(t, seed, false)
		e := New(Partition{Of: 1, KeyParts: 1})
		var got []string
		for i := range x.messages {
			e.Apply(&x.messages[i])
		}
		for _, n := range e.steps {
			if n.Step.Kind != life.StepWorsened {
				got = append(got, fmt.Sprintf("%s at %s", n.Step.Kind, n.Step.At.Format(time.RFC3339Nano)))
			}
		}
		want := x.walk(e.indicators[0].cal)
		if diff := cmp.Diff(want, got); diff != "" {
			t.Fatalf("seed %d (-want +got):\n%s", seed, diff)
		}
		opened += len(want) / 2
	}
	if *arrivalSeed == 0 && opened < 50 {
		t.Errorf("only %d alerts", opened)
	}
}

// walk says when alerts open and return: open at an event whose span signals
// while none is open; return when at two boundaries in a row, as they fall due,
// no span that ends then signals.
func (x *arrivalStream) walk(cal *Calendar) []string {
	var steps []string
	book := &arrivalBook{said: map[string]Observation{}}
	last := x.messages[len(x.messages)-1].Time
	open, quiet := false, 0
	step := func(kind life.StepKind, at Instant) {
		steps = append(steps, fmt.Sprintf("%s at %s", kind, at.Time().Format(time.RFC3339Nano)))
	}
	lit := func(at Instant) bool {
		return slices.ContainsFunc([]int64{2, 5}, func(days int64) bool {
			from := at - Instant(days*day)
			return from >= book.birth && x.signals(book.between(from, at), float64(days))
		})
	}
	events := x.messages[1 : len(x.messages)-1]
	first := events[0].Items[0].Observation.Start
	book.birth = cal.Start(cal.Slot(first))
	boundary := cal.Slot(first.Add(-x.settle)) + 1
	due := func() Instant { return cal.Start(boundary).Add(x.settle) }
	for i := 0; ; i++ {
		next := last + 1
		if i < len(events) {
			next = events[i].Items[0].Observation.Start
		}
		for ; due() <= min(next, last); boundary++ {
			if !open {
				continue
			}
			if quiet++; lit(due()) {
				quiet = 0
			}
			if quiet == 2 {
				open, quiet = false, 0
				step(life.StepReturned, due())
			}
		}
		if i == len(events) {
			return steps
		}
		o := events[i].Items[0].Observation
		book.said[o.ID] = o
		if lit(next) {
			quiet = 0
			if !open {
				open = true
				step(life.StepOpened, next)
			}
		}
	}
}

// TestArrivalSpan holds what the slots that a span cuts through have of it
// against the whole.
func TestArrivalSpan(t *testing.T) {
	for _, test := range []struct {
		q           Quantity
		part, whole uint64
		want        Quantity
	}{
		{Quantity{0, 100}, 1, 3, Quantity{0, 33}},
		{Quantity{0, 100}, 3, 3, Quantity{0, 100}},
		{Quantity{3, 0}, 1, 2, Quantity{1, 1 << 63}},
		{Quantity{0, 0}, 1, 2, Quantity{}},
	} {
		if got := test.q.share(test.part, test.whole); got != test.want {
			t.Errorf("%d/%d of %v is %v, want %v", test.part, test.whole, test.q, got, test.want)
		}
	}
}
