package monitor_test

import (
	order "cmp"
	"fmt"
	"math/rand/v2"
	"regexp"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"tailbell/config"
	"tailbell/monitor"
)

const retireSetup = `
name = "scenario"
folder = "x"
[time]
mode = "history"
[limits]
max_series = 1000
[[indicator]]
name = "restart"
series = ["ferrybill/*/*/restart"]
sums = ["ferrybill/{group}/*/restart"]
unit = "host-days"
every = "1d"
events = "counted"
exposure = "reported"
settle = "1h"
horizon = "3d"
retire = "6d"
windows = ["2d", "4d"]
allowance = "20 in 1y"
allowance_for = "indicator"
quiet = 2
[indicator.baseline]
kind = "known"
rate = 0.2
[[indicator]]
name = "crash"
series = ["ferrybill/*/*/crash"]
sums = ["ferrybill/{group}/*/crash"]
unit = "host-days"
every = "1d"
events = "each"
exposure = "clock"
clock = { size = 1, per = "1d" }
settle = "1h"
horizon = "3d"
retire = "4d"
windows = ["2d"]
p_limit = 0.01
tails = ["upper"]
quiet = 2
[indicator.baseline]
kind = "known"
rate = 0.2
`

// Whatever series come, end and come back, and whose numbers are given to others:
// what is found and counted is the same after restarts.
func TestRetiringIsTheSameAfterRestarts(t *testing.T) {
	setup, err := config.Parse([]byte(retireSetup), "test")
	if err != nil {
		t.Fatal(err)
	}
	var retired, returned, sums, steps int64
	for range 15 {
		seed := rand.Uint64()
		messages := comeAndGo(rand.New(rand.NewPCG(seed, 7)), setup)
		alone := play(t, messages, 0)
		if !alone.account.Balanced() {
			t.Fatalf("seed %d: the account does not balance: %+v", seed, alone.account)
		}
		for _, every := range []int{1, 5, 17} {
			again := play(t, messages, every)
			for _, c := range []struct {
				what string
				diff string
			}{
				{"steps", cmp.Diff(alone.store.Steps, again.store.Steps)},
				{"account", cmp.Diff(alone.account, again.account)},
				{"slots", cmp.Diff(alone.engine.Slots(), again.engine.Slots())},
				{"conditions", cmp.Diff(alone.engine.Conditions(), again.engine.Conditions())},
				{"refused", cmp.Diff(alone.store.Refused, again.store.Refused)},
				{"list", cmp.Diff(list(alone.engine), list(again.engine))},
			} {
				if c.diff != "" {
					t.Fatalf("seed %d, restarted every %d messages: %s (-undisturbed +restarted):\n%s", seed, every, c.what, c.diff)
				}
			}
		}
		seen := map[string]bool{}
		for _, n := range alone.store.Steps {
			key := fmt.Sprint(n.Record.Series, n.Record.Direction, n.Record.Number, n.Record.ID)
			if n.Step.Kind == "opened" {
				if seen[key] {
					t.Fatalf("seed %d: %s was opened twice", seed, key)
				}
				seen[key] = true
			}
		}
		retired, returned, steps = retired+alone.account.Retired, returned+alone.account.Returned, steps+int64(len(alone.store.Steps))
		sums += int64(len(alone.engine.Slots()))
	}
	t.Logf("%d series retired, %d returned, %d steps, %d slots", retired, returned, steps, sums)
	if retired < 500 || returned < 100 || steps < 200 {
		t.Error("the streams no longer reach what they are for")
	}
}

// That a series ends changes nothing of what was found, as long as no other has a
// share in it and it does not come back.
func TestRetiringChangesNoFinding(t *testing.T) {
	text := strings.ReplaceAll(retireSetup, "allowance_for = \"indicator\"\n", "")
	text = regexp.MustCompile(`(?m)^sums = .*\n`).ReplaceAllString(text, "")
	stays := regexp.MustCompile(`(?m)^retire = .*\n`).ReplaceAllString(text, "")
	var setups [2]*config.Setup
	for i, text := range []string{text, stays} {
		var err error
		if setups[i], err = config.Parse([]byte(text), "test"); err != nil {
			t.Fatal(err)
		}
	}
	type found struct {
		ID, Series, Kind, At, Why string
		P                         float64
	}
	retired, steps := int64(0), 0
	for range 15 {
		seed := rand.Uint64()
		var findings [2][]found
		for i, setup := range setups {
			messages := comeAndGo(rand.New(rand.NewPCG(seed, 7)), setup)
			for day := range messages { // every name is one of a few days only
				for j := range messages[day].Items {
					o := &messages[day].Items[j].Observation
					o.Series = strings.Replace(o.Series, "host", fmt.Sprintf("host-%d", o.Start/(4*24*3600_000_000)), 1)
				}
			}
			o := play(t, messages, 0)
			for _, n := range o.store.Steps {
				f := found{n.Record.ID, n.Record.Series, string(n.Step.Kind), n.Step.At.String(), n.Step.Why, 0}
				if n.Step.Evidence != nil {
					f.P = n.Step.Evidence.P
				}
				findings[i] = append(findings[i], f)
			}
			retired += o.account.Retired
			slices.SortFunc(findings[i], func(a, b found) int { // of one moment they are in order of numbers
				return order.Or(strings.Compare(a.At, b.At), strings.Compare(a.ID, b.ID), strings.Compare(a.Kind, b.Kind))
			})
		}
		if diff := cmp.Diff(findings[1], findings[0]); diff != "" {
			t.Fatalf("seed %d (-staying +retiring):\n%s", seed, diff)
		}
		steps += len(findings[0])
	}
	t.Logf("%d series retired, %d steps", retired, steps)
	if retired < 300 || steps < 50 {
		t.Error("the streams no longer reach what they are for")
	}
}

func list(e *monitor.Engine) []monitor.Listed {
	all, _ := e.List(config.NewPattern("*"), 0, 1000)
	return all
}

// comeAndGo plays half a year of hosts that report on some days in a row, then not
// for a while, some of them never again.
func comeAndGo(r *rand.Rand, setup *config.Setup) []monitor.Message {
	var messages []monitor.Message
	add := func(m monitor.Message) {
		m.Position = uint64(len(messages) + 1)
		messages = append(messages, m)
	}
	add(monitor.Message{Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
	begin := time.Date(2026, 1, 1, 0, 0, 0, 0, time.UTC)
	until := map[string]int{}
	for day := range 100 {
		at := begin.AddDate(0, 0, day)
		var names []string
		for name, last := range until {
			if last >= day {
				names = append(names, name)
			}
		}
		for range r.IntN(3) {
			name := fmt.Sprintf("ferrybill/%d/host-%d/%s", r.IntN(3), r.IntN(12), []string{"restart", "crash"}[r.IntN(2)])
			if until[name] < day {
				until[name] = day + r.IntN(9)
				names = append(names, name)
			}
		}
		slices.Sort(names)
		names = slices.Compact(names)
		for i, name := range names {
			o := monitor.Observation{Series: name, HasEvents: true, Events: max(0, r.Int64N(9)-6)}
			o.Start, o.End = monitor.InstantOf(at), monitor.InstantOf(at.AddDate(0, 0, 1))
			if name[len(name)-1] == 't' {
				o.HasExposure, o.Exposure = true, config.Decimal{Coef: 1}
			}
			if r.IntN(2) == 0 {
				o.ID = fmt.Sprintf("%d-%d", day-r.IntN(2)*r.IntN(8), i)
				o.Revision = r.Int64N(3)
			}
			m := monitor.Message{Kind: monitor.Observations, Items: []monitor.Item{{Observation: o}}}
			m.Time, m.HasTime = monitor.InstantOf(at.AddDate(0, 0, 1).Add(time.Duration(r.IntN(7200))*time.Second)), true
			add(m)
		}
		if r.IntN(6) == 0 {
			for _, name := range names {
				act := monitor.Act{Kind: monitor.Acknowledge, Series: name, Direction: "upper", By: "B. Tester"}
				add(monitor.Message{Kind: monitor.ActMessage, Act: act, Time: monitor.InstantOf(at.AddDate(0, 0, 1).Add(3 * time.Hour)), HasTime: true})
			}
		}
	}
	add(monitor.Message{Kind: monitor.Tick, Time: monitor.InstantOf(begin.AddDate(0, 0, 140)), HasTime: true})
	return messages
}
