package monitor_test

import (
	"fmt"
	"maps"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/life"
)

// TestActsMoveTheClock plays acts that carry their own time, each later than every
// report so far, which moves the clock of history time over the first boundary of a
// day: such an act waits for what others count as a report does.
func TestActsMoveTheClock(t *testing.T) {
	const wards = 6
	play := func(of int) map[string]string {
		c := newCross(t, rand.New(rand.NewPCG(1, 1)), of)
		setup := countingSetupOf(t, countingPeers, of)
		for _, r := range c.readers {
			r.publish(monitor.Message{Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
		}
		for day := 1; day <= 29; day++ {
			for ward := range wards {
				name := wardOf(ward%2, 2, ward)
				r := c.readers[ward%of]
				r.publish(messageOf(report(name, day, int64((day*(ward+2))%5), 9)))
			}
			for ward := 0; ward < wards; ward += 2 {
				act := monitor.Act{Kind: monitor.Note, Series: wardOf(0, 2, ward), Direction: life.Upper, By: "A. Nurse", Why: "seen"}
				act.At, act.HasAt = monitor.InstantOf(marchDay(day+1).Add(3*time.Hour)), true
				c.readers[0].publish(monitor.Message{Kind: monitor.ActMessage, Act: act})
			}
			if of == 2 {
				c.readers[0].read(1 << 30) // the other one is days behind
				c.deliver(0, 1<<30)
			}
		}
		for _, r := range c.readers {
			r.publish(monitor.Message{Kind: monitor.Tick, Time: monitor.InstantOf(marchDay(31)), HasTime: true})
		}
		c.finish()
		return texts(t, c.records())
	}
	want := play(1)
	if len(want) == 0 {
		t.Fatal("no alert was compared")
	}
	if diff := cmp.Diff(want, play(2)); diff != "" {
		t.Errorf("-one +two partitions:\n%s", diff)
	}
}

// TestItemsOfOneMessage plays a message whose second report corrects its first much
// later: that moves the clock since the id is known by then, and only by then.
func TestItemsOfOneMessage(t *testing.T) {
	setup := countingSetupOf(t, countingPeers, 2)
	e := monitor.New(monitor.Partition{Number: 0, Of: 2, KeyParts: 1})
	e.Apply(&monitor.Message{Position: 1, Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
	first := report(wardOf(0, 2, 0), 4, 1, 9)
	first.ID = "x"
	again := first
	again.Revision, again.Reported = 1, monitor.InstantOf(marchDay(20))
	m := messageOf(report(wardOf(0, 2, 1), 4, 1, 9), first, again)
	m.Position = 2
	if !e.Holds(&m) {
		t.Fatal("the message is not held, though nothing was told by the other partition")
	}
	told := &monitor.Message{Position: 3, Kind: monitor.SummaryMessage}
	told.Summary = firstTold(t, setup, 1)
	e.ApplyAhead(told)
	if !e.Holds(&m) {
		t.Errorf("the message is not held, the clock goes to %v", e.Clock().Time())
	}
	if clock := e.Clock().Time(); clock.After(marchDay(8)) {
		t.Errorf("the clock has gone to %v", clock)
	}
}

// firstTold is the first that a partition of two tells the other, on the fifth of March.
func firstTold(t *testing.T, setup *config.Setup, partition int) *monitor.Summary {
	t.Helper()
	e := monitor.New(monitor.Partition{Number: partition, Of: 2, KeyParts: 1})
	e.Apply(&monitor.Message{Position: 1, Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
	m := messageOf(report(wardOf(partition, 2, 0), 4, 1, 9))
	m.Position = 2
	e.Holds(&m)
	list := e.Drain().Summaries
	if len(list) == 0 {
		t.Fatal("nothing was told")
	}
	s, err := monitor.DecodeSummary(list[0].Data)
	if err != nil {
		t.Fatal(err)
	}
	return s
}

// TestShorterSettle brings a set-up in the middle of a history under which slots settle
// days sooner: boundaries of several days are due at once, behind the clock. The
// partitions tell each other of each before the next.
func TestShorterSettle(t *testing.T) {
	settling := func(settle string, of int) *config.Setup {
		text := strings.Replace(fmt.Sprintf(countingSetup, countingPeers), `"2h"`, settle, 1)
		setup, err := config.Parse([]byte(text), "set-up")
		if err != nil {
			t.Fatal(err)
		}
		setup.Partitions = of
		return setup
	}
	play := func(of int) map[string]string {
		c := newCross(t, rand.New(rand.NewPCG(1, 1)), of)
		for day := 1; day <= 29; day++ {
			for _, r := range c.readers {
				m := monitor.Message{Kind: monitor.SettingMessage, Time: monitor.InstantOf(marchDay(day)), HasTime: true}
				switch day {
				case 1:
					m.Setting.Setup = settling(`"75h"`, of)
					r.publish(m)
				case 18:
					m.Setting.Setup = settling(`"0h"`, of)
					r.publish(m)
				}
			}
			for ward := range 6 {
				c.readers[ward%of].publish(messageOf(report(wardOf(ward%2, 2, ward), day, int64((day*(ward+2))%5), 9)))
			}
		}
		for _, r := range c.readers {
			r.publish(monitor.Message{Kind: monitor.Tick, Time: monitor.InstantOf(marchDay(31)), HasTime: true})
		}
		c.finish()
		return texts(t, c.records())
	}
	want := play(1)
	if len(want) == 0 {
		t.Fatal("no alert was compared")
	}
	if diff := cmp.Diff(want, play(2)); diff != "" {
		t.Errorf("-one +two partitions:\n%s", diff)
	}
}

// TestSetupWaitsForSums takes an indicator out of the set-up, and in again, while its
// sums wait for a partition that is days behind: they are looked at up to the moment of
// the set-up first, and alerts are those of one partition.
func TestSetupWaitsForSums(t *testing.T) {
	const shared = "allowance = \"60 in 1y\"\nallowance_for = \"indicator\""
	parse := func(of int, replace ...string) *config.Setup {
		text := strings.ReplaceAll(inboundSetup, "*/*/fall", "*/fall")
		setup, err := config.Parse([]byte(strings.NewReplacer(replace...).Replace(text)), "set-up")
		if err != nil {
			t.Fatal(err)
		}
		setup.Partitions = of
		return setup
	}
	for name, changes := range map[string][2][]string{
		"it goes":                {nil, {`"fall"`, `"error"`, "/fall", "/error"}},
		"it goes and had counts": {{"p_limit = 0.01", shared}, {`"fall"`, `"error"`, "/fall", "/error"}},
	} {
		play := func(of int, restarts bool) map[string]string {
			c := newCross(t, rand.New(rand.NewPCG(1, 1)), of)
			before, after := parse(of, changes[0]...), parse(of, changes[1]...)
			home := before.HomeOf("fall")
			for p, r := range c.readers {
				r.publish(monitor.Message{Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: before}})
				for day := 1; day <= 16; day++ {
					for ward := range 6 {
						if o := report(wardOf(ward%2, 2, ward), day, int64(day%4)*int64(day/12), 9); before.PartitionOf(o.Series) == p {
							r.publish(messageOf(o))
						}
					}
				}
				for n, setup := range []*config.Setup{after, before} {
					moment := monitor.InstantOf(marchDay(17 + 3*n).Add(2 * time.Hour))
					r.publish(monitor.Message{Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}, Time: moment, HasTime: true})
				}
				r.publish(monitor.Message{Kind: monitor.Tick, Time: monitor.InstantOf(marchDay(31)), HasTime: true})
			}
			if c.readers[home].read(1 << 30); of == 2 {
				if got := c.readers[home].engine.WaitsFor(); len(got) != 1 || got[0] != 1-home {
					t.Errorf("%s: the set-up waits for partitions %v", name, got)
				}
			}
			if restarts {
				c.readers[home].restart(t)
			}
			c.finish()
			return texts(t, c.records())
		}
		want := play(1, false)
		if !slices.ContainsFunc(slices.Collect(maps.Values(want)), func(x string) bool { return strings.Contains(x, `"*/fall"`) }) {
			t.Fatalf("%s: no alert of the sum was compared", name)
		}
		for _, restarts := range []bool{false, true} {
			if diff := cmp.Diff(want, play(2, restarts)); diff != "" {
				t.Errorf("%s: -one +two partitions:\n%s", name, diff)
			}
		}
	}
}

// TestSetupInLiveTime checks that a set-up of live time waits for sums of an indicator
// that it ends alone, and only where a division carried it over.
func TestSetupInLiveTime(t *testing.T) {
	p := newPair(t)
	for day := 1; day <= 4; day++ {
		p.day(p.home, day)
		p.day(p.far, day)
	}
	moment := monitor.InstantOf(marchDay(6))
	for _, h := range []*house{p.home, p.far} {
		h.apply(monitor.Message{Kind: monitor.Live, Stored: moment})
	}
	holds := func(text string, carried bool) bool {
		setup, err := config.Parse([]byte(text), "set-up")
		if err != nil {
			t.Fatal(err)
		}
		setup.Partitions = 2
		return p.home.engine.Holds(&monitor.Message{
			Position: p.home.n + 1, Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}, Stored: moment, Carried: carried,
		})
	}
	without := strings.NewReplacer(`"fall"`, `"error"`, "/fall", "/error").Replace(inboundSetup)
	changed := strings.Replace(inboundSetup, "p_limit = 0.01", "p_limit = 0.02", 1)
	if holds(without, false) {
		t.Error("a set-up of live time is held")
	}
	if holds(changed, true) {
		t.Error("a set-up that ends no indicator is held in live time")
	}
	if !holds(without, true) {
		t.Error("a set-up that was carried over is not held")
	}
	if got, want := p.home.engine.WaitsFor(), []int{p.far.part.Number}; !slices.Equal(got, want) {
		t.Errorf("it waits for partitions %v, not %v", got, want)
	}
	p.hand(p.told()...)
	if holds(without, true) {
		t.Error("a set-up is held though all was told")
	}
}
