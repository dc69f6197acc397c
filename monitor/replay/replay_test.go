package replay

import (
	"fmt"
	"math/rand/v2"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/life"
)

const setupText = `
name = "quillmere"
folder = "x"
[time]
mode = "history"
[limits]
max_ids = %d
[[indicator]]
name = "falls"
series = ["*/*/falls"]
unit = "bed-days"
every = "1d"
zone = "Europe/Berlin"
events = "counted"
exposure = "reported"
settle = "1d"
horizon = "20d"
windows = ["7d", "28d"]
tails = ["upper", "lower"]
p_limit = 0.02
quiet = 2
[indicator.baseline]
kind = "known"
rate = 0.02
[[indicator]]
name = "injuries"
series = ["*/injuries"]
unit = "hours"
every = "1w"
zone = "UTC"
events = "counted"
exposure = "reported"
settle = "2d"
horizon = "30d"
windows = ["4w"]
tails = ["upper"]
p_limit = 0.05
quiet = 1
[indicator.baseline]
kind = "peers"
span = "8w"
min_events = 1
`

func parse(t *testing.T, maxIDs int) *config.Setup {
	t.Helper()
	setup, err := config.Parse(fmt.Appendf(nil, setupText, maxIDs), "set-up")
	if err != nil {
		t.Fatal(err)
	}
	return setup
}

// wild makes a tape of everything that may come: late and corrected rows,
// moves between series, retractions, rows far too old for their time, series
// of nobody, acts, and rows at the same moment.
func wild(rng *rand.Rand) *Tape {
	t := &Tape{}
	berlin, err := time.LoadLocation("Europe/Berlin")
	if err != nil {
		panic(err)
	}
	begin := time.Date(2024, 2, 21, 0, 0, 0, 0, berlin)
	said := map[string]int64{}
	place := 0
	for day := range 90 {
		start := begin.AddDate(0, 0, day)
		for ward := range 40 {
			if rng.IntN(12) == 0 {
				continue // a gap
			}
			o := monitor.Observation{
				Series: fmt.Sprintf("site-%d/ward-%d/falls", ward%3, ward), Start: monitor.InstantOf(start), End: monitor.InstantOf(start.AddDate(0, 0, 1)),
				Events: int64(rng.IntN(40) / 38 * 2), HasEvents: true, Exposure: config.Decimal{Coef: uint64(15 + rng.IntN(9))}, HasExposure: true,
			}
			if ward >= 30 {
				o.Series = fmt.Sprintf("site-%d/ward-%d/nobody", ward%3, ward)
			}
			if ward%8 == 7 {
				o.Series = fmt.Sprintf("site-%d/injuries", ward)
				o.Events = int64(rng.IntN(3))
			}
			if ward == 3 && day > 40 && day < 60 {
				o.Events++
			}
			at := start.AddDate(0, 0, 1)
			if rng.IntN(5) == 0 {
				at = at.Add(time.Duration(rng.IntN(25*24)) * time.Hour)
			}
			if rng.IntN(200) == 0 {
				at = at.AddDate(0, 0, 40) // far too late
			}
			if ward%2 == 0 {
				o.ID = fmt.Sprintf("id-%d-%d", ward%3, rng.IntN(90*20))
				said[site(o.Series)+o.ID]++
				o.Revision = said[site(o.Series)+o.ID] - int64(rng.IntN(8)/7)
				if o.Revision > 1 && rng.IntN(3) == 0 {
					o = monitor.Observation{Series: o.Series, ID: o.ID, Revision: o.Revision, Retracted: true}
				}
			}
			o.HasReported = rng.IntN(2) == 0
			if o.HasReported {
				o.Reported = monitor.InstantOf(at)
			}
			place++
			t.Add(&o, monitor.InstantOf(at), false, false, Place{"wild.csv", place})
		}
		if day%3 == 1 {
			t.AddAct(monitor.Act{Kind: monitor.ActKinds[rng.IntN(len(monitor.ActKinds))], Series: "site-0/ward-3/falls", Until: monitor.InstantOf(start.AddDate(0, 0, 4)), Direction: life.Upper, Mark: life.MarkReal, By: "Ann Example", Why: "looked at"},
				monitor.InstantOf(start.AddDate(0, 0, 1)), false, Place{"wild.csv", place})
		}
	}
	t.Sort()
	return t
}

// onlyPlain leaves out the rows that make a tape indivisible.
func onlyPlain(t *Tape, horizon time.Duration) *Tape {
	plain := &Tape{}
	for i := range t.n {
		r := t.row(i)
		m := monitor.Message{Items: make([]monitor.Item, 1)}
		t.fill(&m, i)
		switch {
		case r.kind == act:
			plain.AddAct(m.Act, r.time, false, t.place(r))
		case r.extra >= 0 && r.flags&retracted == 0 && r.start < r.time.Add(-horizon):
		default:
			plain.Add(&m.Items[0].Observation, r.time, false, false, t.place(r))
		}
	}
	plain.Sort()
	return plain
}

func compare(t *testing.T, want, got *Result) {
	t.Helper()
	for _, c := range []struct {
		name      string
		want, got any
	}{
		{"steps", want.Steps, got.Steps},
		{"refused", want.Refused, got.Refused},
		{"account", want.Account, got.Account},
		{"conditions", want.Conditions, got.Conditions},
		{"watched", want.Watched, got.Watched},
		{"clock", []monitor.Instant{want.Clock, want.NextDue}, []monitor.Instant{got.Clock, got.NextDue}},
	} {
		if diff := cmp.Diff(c.want, c.got); diff != "" {
			t.Fatalf("%s (-whole +parts):\n%s", c.name, diff)
		}
	}
}

// TestParts holds a tape that is played in parts, on any number of cores,
// against one engine that plays it whole.
func TestParts(t *testing.T) {
	setup := parse(t, 1_000_000)
	for seed := range uint64(6) {
		rng := rand.New(rand.NewPCG(seed, 1))
		tape := onlyPlain(wild(rng), 19*24*time.Hour)
		o := Options{Until: monitor.InstantOf(time.Date(2024, 8, 1, 0, 0, 0, 0, time.UTC)), HasUntil: seed%2 == 0, Whole: true}
		whole, err := Run(t.Context(), setup, tape, o)
		if err != nil {
			t.Fatal(err)
		}
		if len(whole.Steps) == 0 || len(whole.Refused) == 0 || len(whole.Conditions) == 0 {
			t.Fatalf("seed %d: the tape shows nothing: %d steps, %d refused", seed, len(whole.Steps), len(whole.Refused))
		}
		for _, workers := range []int{1, 3} {
			o.Whole, o.Workers = false, workers
			parts, err := Run(t.Context(), setup, tape, o)
			if err != nil {
				t.Fatal(err)
			}
			if parts.Groups < 2 || parts.Whole != "" {
				t.Fatalf("seed %d: %d groups, %s", seed, parts.Groups, parts.Whole)
			}
			compare(t, whole, parts)
		}
		t.Logf("seed %d: %d rows, %d steps, %d refused", seed, tape.Len(), len(whole.Steps), len(whole.Refused))
	}
}

// TestStored holds a replay against an engine whose changes are drained for a
// store.
func TestStored(t *testing.T) {
	setup := parse(t, 1_000_000)
	tape := wild(rand.New(rand.NewPCG(9, 9)))
	got, err := Run(t.Context(), setup, tape, Options{})
	if err != nil {
		t.Fatal(err)
	}
	if got.Whole == "" {
		t.Error("a tape with ids beyond the horizon was divided")
	}
	e := monitor.New(monitor.Partition{Of: 1, KeyParts: 1})
	e.Apply(&monitor.Message{Position: 1, Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
	var steps []life.Notice
	n := 0
	for m := range tape.Messages() {
		e.Apply(m)
		if n++; n%7 == 0 {
			steps = append(steps, e.Drain().Steps...)
		}
	}
	steps = append(steps, e.Drain().Steps...)
	if diff := cmp.Diff(steps, got.Steps); diff != "" {
		t.Fatalf("steps (-stored +replayed):\n%s", diff)
	}
	if diff := cmp.Diff(e.Account(), got.Account); diff != "" {
		t.Fatalf("account (-stored +replayed):\n%s", diff)
	}
}

// TestFullOfIDs plays a tape whole if its parts would keep more ids than one
// engine may.
func TestFullOfIDs(t *testing.T) {
	tape := onlyPlain(wild(rand.New(rand.NewPCG(3, 3))), 19*24*time.Hour)
	setup := parse(t, 200)
	whole, err := Run(t.Context(), setup, tape, Options{Whole: true})
	if err != nil {
		t.Fatal(err)
	}
	if whole.Account.RefusedBy[monitor.IDsFull] == 0 {
		t.Fatal("the ids are not full")
	}
	parts, err := Run(t.Context(), setup, tape, Options{})
	if err != nil {
		t.Fatal(err)
	}
	compare(t, whole, parts)
}
