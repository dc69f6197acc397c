package counter

import (
	"math/rand/v2"
	"testing"
)

func TestNext(t *testing.T) {
	at := func(at int64, total uint64) Reading { return Reading{At: at, Total: Amount{Lo: total}} }
	since := func(r Reading, since int64) Reading { r.Since, r.HasSince = since, true; return r }
	latest := Side{Known: true, At: 100, Total: Amount{Lo: 7}}
	for _, c := range []struct {
		name  string
		side  Side
		r     Reading
		again bool
		want  Step
	}{
		{"first", Side{}, at(50, 7), false, Step{First, 50, Amount{}}},
		{"first since", Side{}, since(at(50, 7), 20), false, Step{First, 20, Amount{Lo: 7}}},
		{"more", latest, at(130, 9), false, Step{Later, 100, Amount{Lo: 2}}},
		{"no more", latest, at(130, 7), false, Step{Later, 100, Amount{}}},
		{"less", latest, at(130, 3), false, Step{Again, 100, Amount{Lo: 3}}},
		{"more, since later", latest, since(at(130, 9), 110), false, Step{Again, 110, Amount{Lo: 9}}},
		{"more, since before", latest, since(at(130, 9), 100), false, Step{Later, 100, Amount{Lo: 2}}},
		{"less, since before", latest, since(at(130, 3), 90), false, Step{Again, 90, Amount{Lo: 3}}},
		{"the other total fell", latest, at(130, 9), true, Step{Again, 100, Amount{Lo: 9}}},
		{"repeat", latest, at(100, 7), false, Step{Kind: Repeat}},
		{"conflict", latest, at(100, 8), false, Step{Kind: Conflict}},
		{"earlier", latest, at(99, 1), false, Step{Kind: Outdated}},
	} {
		if got := c.side.Next(c.r, c.again); got != c.want {
			t.Errorf("%s: %+v, want %+v", c.name, got, c.want)
		}
	}
}

// What the steps say adds up to what was counted, as far as it was read before
// counting began again, in whatever order and however often readings come.
func TestStepsAddUp(t *testing.T) {
	seed := rand.Uint64()
	r := rand.New(rand.NewPCG(seed, 1))
	for range 2000 {
		var side Side
		var sum, want uint64
		total, began, read := uint64(0), int64(0), uint64(0)
		var old []Reading
		for at := int64(1); at < 60; at++ {
			if r.IntN(8) == 0 { // what was not read is lost
				total, began, read = 0, at, 0
			}
			total += r.Uint64N(4)
			x := Reading{At: at, Total: Amount{Lo: total}, Since: began, HasSince: true}
			if r.IntN(3) == 0 && len(old) > 0 {
				x = old[r.IntN(len(old))]
			} else if r.IntN(3) == 0 {
				continue
			} else {
				old = append(old, x)
				want += total - read
				read = total
			}
			step := side.Next(x, false)
			if step.New() {
				sum += step.More.Lo
				side.Take(x)
			} else if step.Kind == Conflict {
				t.Fatalf("seed %d: a repeat is in conflict", seed)
			}
		}
		if sum != want {
			t.Fatalf("seed %d: the steps add up to %d, read was %d", seed, sum, want)
		}
	}
}
