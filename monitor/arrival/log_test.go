package arrival

import (
	"bytes"
	"errors"
	"maps"
	"math"
	"slices"
	"testing"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"
)

// twin is the same by brute force: what stands at each instant.
type twin map[int64]Count

func (w twin) change(at int64, by Count) bool {
	now := w[at].plus(by)
	if !now.valid() {
		return false
	}
	if w[at] = now; now == (Count{}) {
		delete(w, at)
	}
	return true
}

func (w twin) instants() []int64 { return slices.Sorted(maps.Keys(w)) }

func (w twin) span(at, width int64) (sum Count) {
	for t, c := range w {
		if at-width < t && t <= at {
			sum = sum.plus(c)
		}
	}
	return sum
}

// backwards adds up from at until enough holds; it says at which instant that was.
func (w twin) backwards(at int64, enough func(Count) bool) (from int64, sum Count, ok bool) {
	for _, t := range slices.Backward(w.instants()) {
		if t > at {
			continue
		}
		if sum = sum.plus(w[t]); enough(sum) {
			return t, sum, true
		}
	}
	return 0, Count{}, false
}

func (w twin) lastTrials(at, n int64) (int64, Count, bool) {
	return w.backwards(at, func(c Count) bool { return c.Trials >= n })
}

// spanLooks are all looks over spans, by instant and window.
func (w twin) spanLooks(widths []int64) (looks []Look) {
	for _, t := range w.instants() {
		for j, width := range widths {
			if w[t].Events > 0 {
				looks = append(looks, Look{t, j, w.span(t, width)})
			}
		}
	}
	return looks
}

// trialLooks are all looks over the last n trials; At -1 stands for a window
// that is not full.
func (w twin) trialLooks(n int64) map[int64]Count {
	looks := map[int64]Count{}
	for t, c := range w {
		if _, seen, full := w.lastTrials(t, n); c.Events > 0 && full {
			looks[t] = seen
		}
	}
	return looks
}

func someCount(t *rapid.T) Count {
	c := Count{Events: rapid.Int64Range(0, 3).Draw(t, "events"), Trials: rapid.Int64Range(0, 4).Draw(t, "trials")}
	c.Late = rapid.Int64Range(0, c.Events).Draw(t, "late")
	return c
}

// TestAgainstTwin changes a Log and its twin in the same way, with late,
// revised and retracted events, and compares all that can be asked of them;
// what a change altered must be among what is to be looked at again.
func TestAgainstTwin(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		var l Log
		w := twin{}
		instant := rapid.Int64Range(-3, 40)
		widths := rapid.SliceOfN(rapid.Int64Range(1, 15), 1, 3).Draw(t, "widths")
		n := rapid.Int64Range(1, 9).Draw(t, "n")
		floor := int64(math.MinInt64)
		t.Repeat(map[string]func(*rapid.T){
			"change": func(t *rapid.T) {
				before, trialsBefore := w.spanLooks(widths), w.trialLooks(n)
				changed := changeSome(t, &l, w, floor, instant)
				checkAgain(t, &l, w, changed, widths, before)
				checkAgainTrials(t, &l, w, changed, n, trialsBefore)
			},
			"forget": func(t *rapid.T) {
				floor = max(floor, rapid.Int64Range(-5, 25).Draw(t, "floor"))
				l.Forget(floor)
				maps.DeleteFunc(w, func(at int64, _ Count) bool { return at < floor })
			},
			"restart": func(t *rapid.T) {
				var again Log
				if err := again.UnmarshalBinary(whole(t, &l)); err != nil {
					t.Fatal(err)
				}
				l = again
			},
			"": func(t *rapid.T) { compare(t, &l, w, floor) },
		})
	})
}

// changeSome changes one instant or two, and returns them.
func changeSome(t *rapid.T, l *Log, w twin, floor int64, instant *rapid.Generator[int64]) (changed []int64) {
	for range rapid.IntRange(1, 2).Draw(t, "changes") {
		at := instant.Draw(t, "at")
		by := someCount(t)
		switch rapid.IntRange(0, 3).Draw(t, "kind") {
		case 0:
			by = by.Minus()
		case 1:
			by = w[at].Minus() // all is taken back
		}
		err := l.Change(at, by)
		switch {
		case at < floor:
			if !errors.Is(err, ErrForgotten) {
				t.Fatalf("%d lies before the floor %d: %v", at, floor, err)
			}
		case w.change(at, by) != (err == nil):
			t.Fatalf("changing %+v at %d by %+v: %v", w[at], at, by, err)
		case err == nil:
			changed = append(changed, at)
		}
	}
	return changed
}

func checkAgain(t *rapid.T, l *Log, w twin, changed, widths []int64, before []Look) {
	again := slices.Collect(l.Again(changed, widths))
	reaches := func(k Look) bool {
		return slices.ContainsFunc(changed, func(a int64) bool { return k.At-widths[k.Window] < a && a <= k.At })
	}
	after := w.spanLooks(widths)
	want := slices.DeleteFunc(slices.Clone(after), func(k Look) bool { return !reaches(k) })
	if diff := cmp.Diff(want, again); diff != "" && len(want)+len(again) > 0 {
		t.Fatalf("changed %v, widths %v (-want +got):\n%s", changed, widths, diff)
	}
	for _, k := range after { // what differs is among them
		if !slices.Contains(before, k) && !slices.Contains(again, k) {
			t.Fatalf("changed %v: %+v differs and is not looked at again", changed, k)
		}
	}
	for _, k := range before { // what is gone had its own instant changed
		still := slices.ContainsFunc(after, func(x Look) bool { return x.At == k.At && x.Window == k.Window })
		if !still && !slices.Contains(changed, k.At) {
			t.Fatalf("changed %v: %+v is gone", changed, k)
		}
	}
}

func checkAgainTrials(t *rapid.T, l *Log, w twin, changed []int64, n int64, before map[int64]Count) {
	again := map[int64]bool{}
	last := int64(math.MinInt64)
	for k, full := range l.AgainTrials(changed, n) {
		_, seen, ok := w.lastTrials(k.At, n)
		if ok != full || seen != k.Count || w[k.At].Events == 0 || k.At <= last {
			t.Fatalf("changed %v, n %d: %+v, full %t; want %+v, %t", changed, n, k, full, seen, ok)
		}
		again[k.At], last = true, k.At
	}
	for at, c := range w {
		between := func(a int64) bool { return a <= at && w.span(at, at-a).Trials < n }
		if want := c.Events > 0 && slices.ContainsFunc(changed, between); want != again[at] {
			t.Fatalf("changed %v, n %d: the look at %d is to be made again: %t; want %t", changed, n, at, again[at], want)
		}
	}
	after := w.trialLooks(n)
	for at, c := range after {
		if was, ok := before[at]; (!ok || was != c) && !again[at] {
			t.Fatalf("changed %v, n %d: %d now sees %+v and is not looked at again", changed, n, at, c)
		}
	}
	for at := range before {
		if _, ok := after[at]; !ok && !again[at] && !slices.Contains(changed, at) {
			t.Fatalf("changed %v, n %d: the look at %d is gone", changed, n, at)
		}
	}
}

// compare holds all answers against the twin's.
func compare(t *rapid.T, l *Log, w twin, floor int64) {
	if l.Len() != len(w) || l.Floor() != floor {
		t.Fatalf("%d instants from %d on, want %d from %d", l.Len(), l.Floor(), len(w), floor)
	}
	listed := twin{}
	for at, c := range l.Instants(-10, 50) {
		listed[at] = c
	}
	if diff := cmp.Diff(w, listed); diff != "" {
		t.Fatalf("instants (-want +got):\n%s", diff)
	}
	for at := int64(-5); at < 45; at++ {
		if l.At(at) != w[at] {
			t.Fatalf("at %d stands %+v, want %+v", at, l.At(at), w[at])
		}
		for _, x := range []int64{1, 2, 5, 11, 100, math.MaxInt64} {
			if got, want := l.Span(at, x), w.span(at, min(x, 1000)); got != want {
				t.Fatalf("(%d-%d, %d] holds %+v, want %+v", at, x, at, got, want)
			}
			from, seen, full := l.LastTrials(at, x)
			if f, s, ok := w.lastTrials(at, x); f != from || s != seen || ok != full {
				t.Fatalf("the last %d trials at %d: %d, %+v, %t; want %d, %+v, %t", x, at, from, seen, full, f, s, ok)
			}
			reach := at
			for _, t := range w.instants() {
				if t > at && w.span(t, t-at).Trials < x {
					reach = t
				}
			}
			if got := l.Reach(at, x); got != reach {
				t.Fatalf("windows of %d trials reach back to %d up to %d, want %d", x, at, got, reach)
			}
			kth, ok := l.Kth(at, x)
			f, _, want := w.backwards(at, func(c Count) bool { return c.Events >= x })
			if kth != f || ok != want {
				t.Fatalf("the %d-th last event at %d: %d, %t; want %d, %t", x, at, kth, ok, f, want)
			}
		}
		previous, ok := l.Previous(at)
		f, _, want := w.backwards(at-1, func(c Count) bool { return c.Events > 0 })
		if previous != f || ok != want {
			t.Fatalf("before %d: %d, %t; want %d, %t", at, previous, ok, f, want)
		}
	}
}

func whole(t interface{ Fatal(...any) }, l *Log) []byte {
	b, err := l.AppendBinary(nil)
	if err != nil {
		t.Fatal(err)
	}
	return b
}

// TestWaitIsSpan holds the rule of the waiting time against that of the count:
// k events within w, and a wait for k events shorter than w.
func TestWaitIsSpan(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		var l Log
		for _, at := range rapid.SliceOf(rapid.Int64Range(0, 60)).Draw(t, "at") {
			if err := l.Change(at, Count{Events: rapid.Int64Range(1, 3).Draw(t, "events")}); err != nil {
				t.Fatal(err)
			}
		}
		for at := range l.Instants(0, 60) {
			for k := int64(1); k < 8; k++ {
				for w := int64(1); w < 30; w++ {
					since, ok := l.Kth(at, k)
					if short := ok && at-since < w; short != (l.Span(at, w).Events >= k) {
						t.Fatalf("at %d: %d events in %d, the last %d since %d (%t)", at, l.Span(at, w).Events, w, k, since, ok)
					}
				}
			}
		}
	})
}

// TestHalfOpen holds the ends of a span: its own instant counts, one exactly
// its width earlier does not.
func TestHalfOpen(t *testing.T) {
	var l Log
	for _, at := range []int64{100, 128, 129} {
		if err := l.Change(at, Count{Events: 1}); err != nil {
			t.Fatal(err)
		}
	}
	if got := l.Span(128, 28).Events; got != 1 {
		t.Errorf("(100, 128] holds %d events, want 1", got)
	}
	if got := l.Span(127, 28).Events; got != 1 {
		t.Errorf("(99, 127] holds %d events, want 1", got)
	}
	again := slices.Collect(l.Again([]int64{100}, []int64{28, 29}))
	want := []Look{{100, 0, Count{Events: 1}}, {100, 1, Count{Events: 1}}, {128, 1, Count{Events: 2}}}
	if diff := cmp.Diff(want, again); diff != "" {
		t.Errorf("again (-want +got):\n%s", diff)
	}
}

// TestLastTrialsWhole holds that a message of several trials is never split.
func TestLastTrialsWhole(t *testing.T) {
	var l Log
	for at, c := range []Count{{Events: 1, Trials: 4}, {Trials: 5}, {Events: 2, Trials: 3}} {
		if err := l.Change(int64(at), c); err != nil {
			t.Fatal(err)
		}
	}
	for n, want := range map[int64]Count{3: {Events: 2, Trials: 3}, 4: {Events: 2, Trials: 8}, 8: {Events: 2, Trials: 8}, 9: {Events: 3, Trials: 12}} {
		if _, seen, full := l.LastTrials(2, n); !full || seen != want {
			t.Errorf("the last %d trials hold %+v, want %+v", n, seen, want)
		}
	}
	if _, _, full := l.LastTrials(2, 13); full {
		t.Error("a window of 13 trials is full with 12")
	}
}

// TestPatch holds that a copy which takes every patch stays the same, or as much
// of it as it has not forgotten.
func TestPatch(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		var l, copied Log
		w := twin{}
		floor := int64(math.MinInt64)
		for range rapid.IntRange(0, 12).Draw(t, "patches") {
			changed := changeSome(t, &l, w, floor, rapid.Int64Range(-3, 40))
			if rapid.IntRange(0, 3).Draw(t, "forgets") == 0 {
				floor = max(floor, rapid.Int64Range(-5, 25).Draw(t, "floor"))
				l.Forget(floor)
				maps.DeleteFunc(w, func(at int64, _ Count) bool { return at < floor })
			}
			slices.Sort(changed)
			if rapid.IntRange(0, 3).Draw(t, "copy forgets") == 0 {
				copied.Forget(max(floor, rapid.Int64Range(-5, 10).Draw(t, "copy's floor")))
			}
			if err := copied.Patch(l.AppendPatch(nil, slices.Compact(changed))); err != nil {
				t.Fatal(err)
			}
			var rest Log
			if err := rest.UnmarshalBinary(whole(t, &l)); err != nil {
				t.Fatal(err)
			}
			rest.Forget(copied.Floor())
			if a, b := whole(t, &rest), whole(t, &copied); !bytes.Equal(a, b) {
				t.Fatalf("after a patch: %x and %x", a, b)
			}
		}
	})
}

// TestDamage holds that bytes which are cut short, lengthened or of another
// kind are refused, and leave the Log alone.
func TestDamage(t *testing.T) {
	var l Log
	for _, at := range []int64{7, 9, 400} {
		if err := l.Change(at, Count{Events: 2, Trials: 300, Late: 1}); err != nil {
			t.Fatal(err)
		}
	}
	l.Forget(8)
	good := whole(t, &l)
	bad := [][]byte{append(slices.Clone(good), 0), l.AppendPatch(nil, []int64{9}), nil, {9, 0, 0}, {1, 0, 1, 0, 1, 1, 2}, {1, 0, 1, 0, 0, 0, 0}, {1, 0, 2, 4, 1, 0, 0, 0, 1, 0, 0}}
	for n := range good {
		bad = append(bad, good[:n])
	}
	for _, b := range bad {
		if err := l.UnmarshalBinary(b); !errors.Is(err, ErrEncoding) {
			t.Errorf("% x: %v", b, err)
		}
		if !bytes.Equal(whole(t, &l), good) {
			t.Fatalf("% x changed the Log", b)
		}
	}
	if err := l.Patch(good); !errors.Is(err, ErrEncoding) {
		t.Errorf("a whole as a patch: %v", err)
	}
}

// FuzzUnmarshal holds that whatever is read is written again alike.
func FuzzUnmarshal(f *testing.F) {
	var l Log
	for _, at := range []int64{-7, 9, 400} {
		if err := l.Change(at, Count{Events: 2, Trials: 300, Late: 1}); err != nil {
			f.Fatal(err)
		}
		f.Add(whole(f, &l))
	}
	l.Forget(0)
	f.Add(whole(f, &l))
	f.Fuzz(func(t *testing.T, b []byte) {
		var l, again Log
		if err := l.UnmarshalBinary(b); err != nil {
			return
		}
		written := whole(t, &l)
		if err := again.UnmarshalBinary(written); err != nil {
			t.Fatalf("% x, from % x: %v", written, b, err)
		}
		if !bytes.Equal(whole(t, &again), written) {
			t.Fatalf("% x becomes % x", b, written)
		}
	})
}

var sink Count

func BenchmarkArrival(b *testing.B) {
	var l Log
	b.ReportAllocs()
	at := int64(0)
	for b.Loop() {
		at += 1000
		if err := l.Change(at, Count{Events: 1}); err != nil {
			b.Fatal(err)
		}
		sink = l.Span(at, 365_000)
		if l.Len() > 2000 {
			l.Forget(at - 1_000_000)
		}
	}
}
