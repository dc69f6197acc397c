package monitor

import (
	"bytes"
	"fmt"
	"math/rand/v2"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"tailbell/config"
	"tailbell/monitor/life"
)

const quickSetup = `
name = "quick"
folder = "x"
[time]
mode = "history"
[limits]
max_series = 100
max_ids = 100000
[[indicator]]
name = "fall"
series = ["*/fall"]
unit = "bed-days"
every = "1d"
zone = "Europe/Berlin"
events = "counted"
exposure = "reported"
settle = "1d"
horizon = "20d"
windows = ["5d", "12d", "28d"]
tails = ["upper", "lower"]
%s
quiet = 2
[indicator.baseline]
%s
`

// TestQuick holds the quick way to make the usual looks against the long one:
// the same steps, account, states and sums of p-values, over rows that come
// late, twice or not at all.
func TestQuick(t *testing.T) {
	for i, c := range []struct{ rule, baseline string }{
		{"p_limit = 0.01", "kind = \"known\"\nrate = 0.06"},
		{"p_limit = 0.01", "kind = \"reference\"\nevents = 40\nexposure = 640"},
		{"p_limit = 0.01", "kind = \"known\"\nrate = 0.06\nspread = 1.4"},
		{`allowance = "3 in 1y"`, "kind = \"known\"\nrate = 0.06"},
		{"allowance = \"8 in 1y\"\nallowance_for = \"indicator\"", "kind = \"known\"\nrate = 0.06"},
	} {
		baseline := c.baseline
		setup, err := config.Parse(fmt.Appendf(nil, quickSetup, c.rule, baseline), "set-up")
		if err != nil {
			t.Fatal(err)
		}
		for seed := range uint64(4) {
			quick, long := New(Partition{Of: 1, KeyParts: 1}), New(Partition{Of: 1, KeyParts: 1})
			looks := 0
			long.OnLook(func(View) { looks++ })
			long.long = true
			for _, e := range []*Engine{quick, long} {
				e.KeepChances(&KnownChances{})
				e.Apply(&Message{Position: 1, Kind: SettingMessage, Setting: Setting{Setup: setup}})
			}
			steps := [2][]life.Notice{}
			rng := rand.New(rand.NewPCG(seed, uint64(i)))
			for _, m := range lateRows(rng, setup.Indicators[0].Zone) {
				for k, e := range []*Engine{quick, long} {
					e.Apply(&m)
					if m.Position%13 == 0 {
						steps[k] = append(steps[k], e.Drain().Steps...)
					}
				}
			}
			if diff := cmp.Diff(steps[1], steps[0]); diff != "" || len(steps[0]) < 5 {
				t.Fatalf("%s, seed %d: %d steps (-long +quick):\n%s", baseline, seed, len(steps[0]), diff)
			}
			if diff := cmp.Diff(long.Account(), quick.Account()); diff != "" {
				t.Fatalf("%s, seed %d: account (-long +quick):\n%s", baseline, seed, diff)
			}
			for n, s := range long.series {
				if !bytes.Equal(s.encode(nil, true), quick.series[n].encode(nil, true)) {
					t.Fatalf("%s, seed %d: the state of %s differs", baseline, seed, s.name)
				}
			}
			sameChances(t, long.Chances(), quick.Chances())
			if looks < 3000 {
				t.Errorf("only %d looks", looks)
			}
		}
	}
}

func sameChances(t *testing.T, want, got []Chances) {
	t.Helper()
	if len(want) != 2 || len(got) != 2 {
		t.Fatalf("%d and %d sums of p-values", len(want), len(got))
	}
	for i := range want {
		w, g := want[i], got[i]
		if d := w.Sum - g.Sum; w.Looks != g.Looks || w.AtMost != g.AtMost || d > 1e-9*w.Sum || d < -1e-9*w.Sum {
			t.Errorf("p-values %+v; the long way %+v", g, w)
		}
	}
}

// lateRows are a year of rows of a few series: most come in order.
func lateRows(rng *rand.Rand, zone *time.Location) []Message {
	var list []Message
	add := func(m Message) {
		m.Position = uint64(len(list) + 2)
		list = append(list, m)
	}
	known := func(o Observation, at time.Time) {
		add(Message{Kind: Observations, HasTime: true, Time: InstantOf(at), Items: []Item{{Observation: o}}})
	}
	for day := range 365 {
		start := time.Date(2025, 1, 1+day, 0, 0, 0, 0, zone)
		end := time.Date(2025, 1, 2+day, 0, 0, 0, 0, zone)
		for ward := range 4 {
			o := Observation{
				Series: fmt.Sprintf("%d/fall", ward), Start: InstantOf(start), End: InstantOf(end), HasEvents: true, HasExposure: true,
				Events: int64(rng.IntN(16) / 7), Exposure: config.Decimal{Coef: uint64(100 + rng.IntN(60)), Digits: 1},
			}
			if day > 100 && day < 115 && ward == 1 {
				o.Events += 2
			}
			if day > 200 && day < 240 && ward == 2 {
				o.Events = 0
			}
			switch rng.IntN(60) {
			case 0: // missing for good
			case 1: // an old row once more
				old := o
				old.Start, old.End = InstantOf(start.AddDate(0, 0, -9)), InstantOf(end.AddDate(0, 0, -9))
				known(old, end)
				known(o, end)
			case 2:
				o.HasExposure = false
				known(o, end)
			default:
				known(o, end)
			}
		}
	}
	return list
}
