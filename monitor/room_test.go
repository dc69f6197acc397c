package monitor

import (
	"bytes"
	"encoding/json"
	"fmt"
	"math/rand/v2"
	"testing"
	"time"

	"tailbell/config"
)

// TestArchivedSlot compares what is written by hand with the JSON of the struct
// that it is read into.
func TestArchivedSlot(t *testing.T) {
	random := rand.New(rand.NewPCG(20261201, 10))
	for _, name := range []string{"quillmere-east/ward-3/fall", "quillmere-<east>/\"3\"/f&ll", "böhmerwald/\u2028/x", `a\b`, ""} {
		for digits := range 10 {
			s := &series{name: name, indicator: &indicator{
				cfg: &config.Indicator{GrainDigits: digits}, cal: NewCalendar(config.Every{N: 1, Unit: config.Minute}, time.UTC),
			}}
			for range 50 {
				c := &cell{
					slot: random.Int64N(1 << 30), events: random.Int64N(1 << 40), saysEvents: random.Uint32N(2), saysExposure: random.Uint32N(2),
					exposure: Quantity{random.Uint64() >> 1 * uint64(random.IntN(2)), random.Uint64() >> random.IntN(64)},
				}
				if random.IntN(5) == 0 {
					c.exposure = Quantity{}
				}
				want, err := json.Marshal(s.slotSum(c))
				if err != nil {
					t.Fatal(err)
				}
				if got := s.appendSlotSum([]byte("x"), c, s.indicator.cal.Start(c.slot))[1:]; !bytes.Equal(got, want) {
					t.Fatalf("%s, want %s", got, want)
				}
			}
		}
	}
}

// TestRoom keeps pieces of all sizes and finds each as it was written.
func TestRoom(t *testing.T) {
	var r room
	var kept [][]byte
	for n := range 3000 {
		kept = append(kept, r.keep(append(r.next(), bytes.Repeat([]byte{byte(n)}, n*n%977*(1+n%67))...)))
	}
	for n, piece := range kept {
		if want := bytes.Repeat([]byte{byte(n)}, n*n%977*(1+n%67)); !bytes.Equal(piece, want) {
			t.Fatalf("piece %d of %d bytes is another one", n, len(want))
		}
	}
}

// TestIDs holds ids against a map: known, revised, moved on and dropped.
func TestIDs(t *testing.T) {
	random := rand.New(rand.NewPCG(20261201, 11))
	all := []*series{{number: 0}, {number: 1}}
	x := newIDs()
	x.configure(16*24*time.Hour, 1<<20)
	want := map[idKey]identified{}
	var r room
	for day := range int64(60) {
		for range 400 {
			key := idKey{fmt.Sprint("site-", random.IntN(3)), fmt.Sprint("id-", random.IntN(1500))}
			said := identified{key: key, revision: random.Int64(), retracted: random.IntN(5) == 0, generation: day - random.Int64N(5)}
			if old, ok := want[key]; ok {
				said.generation = max(said.generation, old.generation)
			}
			if random.IntN(4) > 0 {
				said.said = contribution{series: all[random.IntN(2)], start: Instant(random.Int64()), end: 7, events: 3, exposure: Quantity{1, 2}, hasEvents: true, late: random.IntN(2) == 0}
			}
			x.put(&said)
			want[key] = said
		}
		x.drop(Instant(day * 24 * time.Hour.Microseconds()))
		for key, said := range want {
			if said.generation < day-16 {
				delete(want, key)
			}
		}
		if changes, _ := x.drain(&r); len(changes) > len(want) {
			t.Fatalf("day %d: %d changes of %d ids", day, len(changes), len(want))
		}
		for n := range 1500 * 3 {
			key := idKey{fmt.Sprint("site-", n%3), fmt.Sprint("id-", n/3)}
			said, ok := want[key]
			if got := x.get(key, all); (got != nil) != ok || ok && *got != said {
				t.Fatalf("day %d, %v: %+v, want %+v", day, key, got, said)
			}
		}
		if x.count != len(want) || len(x.free)+x.count != int(x.places) {
			t.Fatalf("day %d: %d kept, %d free of %d places, want %d", day, x.count, len(x.free), x.places, len(want))
		}
	}
}
