package monitor

import (
	"fmt"
	"math/rand/v2"
	"reflect"
	"slices"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"tailbell/config"
)

const restSetup = `
name = "rest"
folder = "x"
[limits]
max_series = 100
max_ids = 100000
[[indicator]]
name = "restart"
series = ["*/*/restart"]
unit = "host-hours"
every = "5m"
settle = "%s"
horizon = "%s"
events = "%s"
ids = "kept"
%s
quiet = 2
`

// restRules are what differs between set-ups: events, exposure and limits.
var restRules = []struct{ events, rule string }{
	{"each", "exposure = \"clock\"\nclock = { size = 1, per = \"1h\" }\nwindows = [\"10m\", \"1h\", \"4h\"]\ntails = [\"upper\"]\np_limit = 0.002\nretire = \"6h\""},
	{"each", "exposure = \"clock\"\nclock = { size = 4, per = \"1h\" }\nwindows = [\"10m\", \"1h\", \"4h\"]\ntails = [\"upper\", \"lower\"]\np_limit = 0.002"},
	{"each", "exposure = \"clock\"\nclock = { size = \"0.0007\", per = \"1h\" }\nwindows = [\"10m\", { span = \"2h\", step = \"30m\" }, \"4h\"]\ntails = [\"upper\"]\nallowance = \"40 in 1y\""},
	{"each", "exposure = \"clock\"\nclock = { size = 3, per = \"1h\" }\nsince = 2026-03-01T00:00:00Z\nwindows = [\"10m\", \"1h\"]\ntails = [\"upper\"]\np_limit = 0.01"},
	{"counted", "exposure = \"reported\"\nwindows = [\"10m\", \"1h\"]\ntails = [\"upper\"]\np_limit = 0.05"},
	{"each", "exposure = \"clock\"\nclock = { size = 1, per = \"1h\" }\nwindows = [{ span = \"1h\", step = \"30m\" }]\ntails = [\"upper\"]\np_limit = 0.02"},
	{"each", "exposure = \"clock\"\nclock = { size = 20, per = \"1h\" }\nwindows = [\"10m\", \"1h\", \"4h\"]\ntails = [\"upper\"]\np_limit = 0.001"}, // events come often
	{"counted", "exposure = \"clock\"\nclock = { size = 1, per = \"1h\" }\nwindows = [\"30m\", { span = \"2h\", step = \"30m\" }]\ntails = [\"upper\"]\np_limit = 0.002"},
}

func restSetups(t *testing.T, rule int) []*config.Setup {
	t.Helper()
	var list []*config.Setup
	for i, times := range [][2]string{{"5m", "20m"}, {"10m", "40m"}, {"0m", "20m"}} {
		r := restRules[rule]
		rate := "0.4"
		if rule == 2 {
			rate = "500"
		}
		baseline := "[indicator.baseline]\nkind = \"known\"\nrate = " + rate
		if i == 1 {
			baseline = "[indicator.baseline]\nkind = \"reference\"\nevents = 40\nexposure = 100"
		}
		if i == 2 {
			baseline += "\nspread = 1.3"
		}
		setup, err := config.Parse(fmt.Appendf(nil, restSetup+baseline, times[0], times[1], r.events, r.rule), "set-up")
		if err != nil {
			t.Fatal(err)
		}
		list = append(list, setup)
	}
	return list
}

// TestRest holds an engine whose series rest, and one that begins anew from what
// it stored every now and then, against one that visits every series at every
// boundary: the same steps, account, states and archive, over long silences,
// events that come late, twice, in bursts or not at all, acts and other set-ups.
func TestRest(t *testing.T) {
	for rule := range restRules {
		rested, steps, looks := 0, 0, int64(0)
		for seed := range uint64(6) {
			setups := restSetups(t, rule)
			long, resting := New(Partition{Of: 1, KeyParts: 1}), New(Partition{Of: 1, KeyParts: 1})
			long.long = true
			again := New(Partition{Of: 1, KeyParts: 1})
			memory := NewMemory()
			for _, m := range restStream(rand.New(rand.NewPCG(seed, uint64(rule))), setups, rule == 6) {
				for _, e := range []*Engine{long, resting, again} {
					e.Apply(&m)
				}
				if m.Position%7 != 0 {
					continue
				}
				want, got, restored := long.Drain(), resting.Drain(), again.Drain()
				steps += len(want.Steps)
				for i, c := range []Changes{got, restored} {
					if i == 1 { // what no look needs of a state may differ
						want.Series, c.Series, want.States, c.States = nil, nil, nil, nil
					}
					if want.Header, c.Header = nil, nil; !reflect.DeepEqual(want, c) {
						t.Fatalf("rule %d, seed %d, engine %d, position %d (-long +resting):\n%s", rule, seed, i, m.Position, cmp.Diff(want, c))
					}
				}
				for _, ix := range resting.indicators {
					for _, s := range ix.series {
						if s.resting {
							rested++
						}
					}
				}
				if !reflect.DeepEqual(long.Account(), again.Account()) {
					t.Fatalf("rule %d, seed %d, position %d: account (-long +restored):\n%s", rule, seed, m.Position, cmp.Diff(long.Account(), again.Account()))
				}
				if memory.Commit(restored); m.Position%91 == 0 {
					var err error
					if again, err = memory.Reopen(Partition{Of: 1, KeyParts: 1}); err != nil {
						t.Fatal(err)
					}
				}
			}
			if diff := cmp.Diff(long.Account(), resting.Account()); diff != "" {
				t.Fatalf("rule %d, seed %d: account (-long +resting):\n%s", rule, seed, diff)
			}
			if diff := cmp.Diff(viewsOf(long), viewsOf(resting)); diff != "" {
				t.Fatalf("rule %d, seed %d: views (-long +resting):\n%s", rule, seed, diff)
			}
			looks += long.Account().Looks
		}
		if rested < 100 || steps < 30 || looks < 1000 {
			t.Errorf("rule %d: %d series found at rest, %d steps, %d looks", rule, rested, steps, looks)
		}
	}
}

// viewsOf is what is shown of every series.
func viewsOf(e *Engine) (all []string) {
	for _, s := range e.series {
		if s.retired {
			continue
		}
		for _, w := range s.indicator.cfg.Windows {
			views := e.Views(s.name, w.Name, e.Clock().Add(-24*time.Hour).Time(), e.Clock().Time())
			all = append(all, fmt.Sprint(s.name, len(views), views))
		}
		all = append(all, fmt.Sprint(e.SlotsOf(s.name, 300)))
		if g, ok := e.GlanceOf(s.name); ok {
			all = append(all, fmt.Sprint(g))
		}
	}
	return append(all, fmt.Sprint(e.Conditions()))
}

// restStream is some days of a few series: quiet for most of the time, unless events
// come often.
func restStream(rng *rand.Rand, setups []*config.Setup, often bool) []Message {
	var list []Message
	now := InstantOf(time.Date(2026, 3, 2, 0, 0, 0, 0, time.UTC))
	add := func(m Message) {
		m.Position, m.Stored = uint64(len(list)+1), now
		list = append(list, m)
	}
	add(Message{Kind: SettingMessage, Setting: Setting{Setup: setups[0]}})
	add(Message{Kind: Live})
	counted, ids, reports := setups[0].Indicators[0].Events == config.Counted, 0, setups[0].Indicators[0].Exposure == config.Reported
	observe := func(series string, at Instant, events int64) {
		o := Observation{Series: series, Start: at, End: at, Instant: true, Events: events, HasEvents: true}
		if counted {
			o.Start = at - at%Instant(5*minute)
			o.End, o.Instant, o.HasExposure, o.Exposure = o.Start.Add(5*time.Minute), false, reports, config.Decimal{Coef: uint64(1 + rng.IntN(2))}
			if !reports {
				o.Exposure = config.Decimal{}
			}
		}
		if rng.IntN(3) == 0 {
			ids++
			o.ID = fmt.Sprint("x", ids)
		}
		add(Message{Kind: Observations, Items: []Item{{Observation: o}}})
	}
	speaks := slices.Repeat([]bool{counted}, 6)
	for range 700 {
		now = now.Add(time.Duration(1+rng.IntN(9)) * time.Minute)
		for i := range speaks {
			name := fmt.Sprintf("s/%d/restart", i)
			if counted {
				if rng.IntN(90) == 0 {
					speaks[i] = !speaks[i]
				}
				if speaks[i] {
					observe(name, now.Add(-5*time.Minute), int64(rng.IntN(20)/18))
				}
			} else if rng.IntN(40+20*i) == 0 || often && rng.IntN(2) == 0 {
				observe(name, now, 1)
			}
		}
		name := fmt.Sprintf("s/%d/restart", rng.IntN(7))
		switch rng.IntN(60) {
		case 0: // late, or ahead
			observe(name, now.Add(time.Duration(rng.IntN(36)-30)*time.Minute), 1)
		case 1, 5, 6: // a burst
			for range 4 {
				observe(name, now, int64(1+rng.IntN(3)))
			}
		case 7, 8, 9:
			for n := rng.IntN(7); often && n > 0; n-- {
				observe(name, now, 1)
			}
		case 2:
			now = now.Add(time.Duration(rng.IntN(300)) * time.Minute)
			add(Message{Kind: Tick})
		case 3:
			if rng.IntN(4) == 0 {
				add(Message{Kind: SettingMessage, Setting: Setting{Setup: setups[rng.IntN(3)]}})
			}
		case 4:
			if rng.IntN(3) == 0 {
				add(Message{Kind: ActMessage, Act: Act{Kind: Reset, Series: name, From: now, By: "ines", Why: "new hosts"}})
			}
		default:
			add(Message{Kind: Tick})
		}
	}
	return list
}
