package monitor_test

import (
	"encoding/json"
	"flag"
	"fmt"
	"math/rand/v2"
	"testing"

	"github.com/google/go-cmp/cmp"

	"tailbell/config"
	"tailbell/monitor"
)

var crossStreams = flag.Int("cross.streams", 2, "how many streams of series in several partitions are played, of each kind")

// crossSetup has series that may lie in several partitions, and are each other's
// peers or share an allowance.
const crossSetup = `
name = "cross"
folder = "x"
[time]
mode = "history"
[[indicator]]
name = "fall"
series = ["*/*/fall"]
sums = ["{site}/*/fall", "**/fall"]
unit = "bed-days"
every = "1d"
settle = "%s"
horizon = "9d"
windows = ["2d", "5d"]
quiet = 2
ids = "kept"
remind = "3d"
%s
[[indicator]]
name = "error"
series = ["*/*/error"]
unit = "hours"
per = 1000
every = "1h"
zone = "Europe/Berlin"
settle = "1h"
horizon = "4d"
windows = ["1d"]
quiet = 3
retire = "5d"
events = "each"
exposure = "clock"
clock = { size = 10, per = "1h" }
%s
`

// crossKinds are how series depend on each other, of either indicator; the third
// text is what that of the first becomes in the middle of a stream.
var crossKinds = map[string][3]string{
	"peers": {
		"p_limit = 0.05\nevents = \"counted\"\n[[indicator.baseline]]\nsums = \"**/fall\"\nkind = \"known\"\nrate = 0.05\n[[indicator.baseline]]\nkind = \"peers\"\nspan = \"8d\"\nrefresh = \"1w\"",
		"p_limit = 0.02\n[indicator.baseline]\nkind = \"peers\"\nspan = \"3d\"\nrefresh = \"1d\"\n",
		"p_limit = 0.05\nevents = \"counted\"\n[[indicator.baseline]]\nseries = \"*/b/*\"\nkind = \"peers\"\nspan = \"6d\"\nrefresh = \"1mo\"\n[[indicator.baseline]]\nkind = \"peers\"\nspan = \"8d\"\nrefresh = \"1w\"",
	},
	"allowance": {
		"allowance = \"60 in 1y\"\nallowance_for = \"indicator\"\nreserve = 0.3\nevents = \"each\"\nexposure = \"clock\"\nclock = { size = 7, per = \"1d\" }\n[indicator.baseline]\nkind = \"known\"\nrate = 0.05",
		"allowance = \"900 in 1y\"\nallowance_for = \"indicator\"\n[indicator.baseline]\nkind = \"known\"\nrate = 4\n",
		"allowance = \"90 in 1y\"\nallowance_for = \"indicator\"\nreserve = 0.2\nevents = \"each\"\nexposure = \"clock\"\nclock = { size = 7, per = \"1d\" }\n[indicator.baseline]\nkind = \"known\"\nrate = 0.06",
	},
	"both": {
		"allowance = \"60 in 1y\"\nallowance_for = \"indicator\"\nevents = \"counted\"\n[indicator.baseline]\nkind = \"peers\"\nspan = \"10d\"\nrefresh = \"1w\"",
		"allowance = \"900 in 1y\"\nallowance_for = \"indicator\"\n[indicator.baseline]\nkind = \"peers\"\nspan = \"3d\"\nrefresh = \"1w\"\n",
		"p_limit = 0.02\nevents = \"counted\"\n[indicator.baseline]\nkind = \"known\"\nrate = 0.05",
	},
	"strata": {
		"p_limit = 0.05\nevents = \"counted\"\n[indicator.baseline]\nkind = \"peers\"\nspan = \"10d\"\nrefresh = \"1w\"\nstrata = { by = \"weekday\", factors = [1, 1.1, 1.2, 0.9, 1, 0.5, 0.7] }\ndelay = { ages = [\"0h\", \"2d\"], reported = [0.6, 1] }",
		"p_limit = 0.02\n[indicator.baseline]\nkind = \"known\"\nrate = 4\n",
		"p_limit = 0.05\nevents = \"counted\"\n[indicator.baseline]\nkind = \"peers\"\nspan = \"10d\"\nrefresh = \"1w\"\n",
	},
	"proportion": {
		"p_limit = 0.05\nmeasure = \"proportion\"\n[indicator.baseline]\nkind = \"peers\"\nspan = \"8d\"\nrefresh = \"1d\"\nstrata = { by = \"weekday\", factors = [1, 1.1, 1.2, 0.9, 1, 0.5, 0.7] }",
		"allowance = \"900 in 1y\"\nallowance_for = \"indicator\"\n[indicator.baseline]\nkind = \"peers\"\nspan = \"3d\"\nrefresh = \"1mo\"\nmin_events = 3\n",
		"p_limit = 0.04\nmeasure = \"proportion\"\n[indicator.baseline]\nkind = \"peers\"\nspan = \"8d\"\nrefresh = \"1w\"",
	},
}

func crossSetups(t *testing.T, settle string, kind [3]string) (before, after *config.Setup) {
	t.Helper()
	var list []*config.Setup
	for _, fall := range []string{kind[0], kind[2]} {
		setup, err := config.Parse(fmt.Appendf(nil, crossSetup, settle, fall, kind[1]), "set-up")
		if err != nil {
			t.Fatal(err)
		}
		list = append(list, setup)
	}
	return list[0], list[1]
}

// TestCountsDoNotDependOnPartitions plays the same random streams of reports,
// corrections, acts and set-ups with one, two and five partitions whose counts
// arrive in any order between partitions, late, and again, while partitions are
// restarted. The alerts of all series are the same to the byte.
func TestCountsDoNotDependOnPartitions(t *testing.T) {
	for kind, texts := range crossKinds {
		t.Run(kind, func(t *testing.T) {
			playUntilFound(t, 9, *crossStreams, func(n int, random *rand.Rand) int {
				before, after := crossSetups(t, []string{"0h", "1d"}[n%2], texts)
				generator := kind
				if kind == "allowance" {
					generator = "clock"
				}
				inputs := gatherStream(random, before, generator)
				if n%3 > 0 {
					inputs = withSetup(random, inputs, after)
				}
				want := playCross(t, random, inputs, 1, false)
				for _, of := range []int{1, 2, 5} {
					got := playCross(t, random, inputs, of, true)
					if diff := cmp.Diff(want, got); diff != "" {
						t.Fatalf("stream %d: %d partitions (-one +%d):\n%s", n, of, of, diff)
					}
				}
				return len(want)
			})
		})
	}
}

// withSetup puts another set-up in the middle of a stream.
func withSetup(random *rand.Rand, inputs []gatherInput, setup *config.Setup) []gatherInput {
	at := len(inputs)/2 + random.IntN(len(inputs)/4)
	m := monitor.Message{Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}, Time: inputs[at-1].m.Time, HasTime: true}
	list := append([]gatherInput{}, inputs[:at]...)
	return append(append(list, gatherInput{m: m}), inputs[at:]...)
}

// reader is one partition that reads its stream as a daemon does: what is held
// waits, and summaries are looked for further ahead.
type reader struct {
	house
	stream []monitor.Message
	next   int
}

// read applies up to so many messages, and reports how many.
func (r *reader) read(most int) (applied int) {
	for ; applied < most && r.next < len(r.stream); applied++ {
		m := &r.stream[r.next]
		for r.engine.Holds(m) {
			ahead := r.ahead()
			if ahead == nil {
				return applied
			}
			r.engine.ApplyAhead(ahead)
			applied++
		}
		r.engine.Apply(m)
		r.next++
	}
	return applied
}

func (r *reader) ahead() *monitor.Message {
	for i := r.next; i < len(r.stream); i++ {
		if m := &r.stream[i]; m.Kind == monitor.SummaryMessage && m.Position > r.engine.Ahead() {
			return m
		}
	}
	return nil
}

func (r *reader) publish(m monitor.Message) {
	m.Position = uint64(len(r.stream) + 1)
	r.stream = append(r.stream, m)
}

// restart goes on from what the store kept.
func (r *reader) restart(t *testing.T) {
	t.Helper()
	r.house.restart(t)
	r.next = int(r.engine.Position())
}

// cross is a run in several partitions.
type cross struct {
	t       *testing.T
	random  *rand.Rand
	readers []*reader
}

func newCross(t *testing.T, random *rand.Rand, of int) *cross {
	t.Helper()
	c := &cross{t: t, random: random}
	for p := range of {
		part := monitor.Partition{Number: p, Of: of, KeyParts: 1}
		c.readers = append(c.readers, &reader{house: house{engine: monitor.New(part), store: monitor.NewMemory(), part: part}})
	}
	return c
}

// deliver publishes up to so many of the summaries that a partition has told, some
// of them again.
func (c *cross) deliver(p, most int) (delivered int) {
	c.t.Helper()
	r := c.readers[p]
	r.store.Commit(r.engine.Drain())
	for ; r.sent < len(r.store.Told) && delivered < most; delivered++ {
		out := r.store.Told[r.sent]
		r.sent++
		for repeats := 1 + c.random.IntN(2); repeats > 0; repeats-- {
			s, err := monitor.DecodeSummary(out.Data)
			if err != nil {
				c.t.Fatal(err)
			}
			c.readers[out.Partition].publish(monitor.Message{Kind: monitor.SummaryMessage, Summary: s})
		}
		if c.random.IntN(12) == 0 {
			r.sent -= min(r.sent, c.random.IntN(4)) // it was not noted that they arrived
		}
	}
	return delivered
}

// finish lets all partitions read to their ends.
func (c *cross) finish() {
	c.t.Helper()
	for idle := 0; idle < 3; {
		idle++
		for p, r := range c.readers {
			if r.read(1<<30)+c.deliver(p, 1<<30) > 0 {
				idle = 0
			}
		}
	}
	for _, r := range c.readers {
		if r.next < len(r.stream) {
			c.t.Fatalf("partition %d waits for ever for partitions %v, at message %d of %d: %+v", r.part.Number, r.engine.WaitsFor(), r.next+1, len(r.stream), r.stream[r.next])
		}
	}
}

// playCross plays a stream in so many partitions, and returns the records of all
// alerts.
func playCross(t *testing.T, random *rand.Rand, inputs []gatherInput, of int, disturb bool) map[string]string {
	t.Helper()
	c := newCross(t, random, of)
	placed := *inputs[0].m.Setting.Setup
	placed.Partitions = of
	lag := random.IntN(60)
	for _, in := range inputs {
		for p, r := range c.readers {
			all := in.series == "" || in.m.Kind == monitor.ActMessage && in.m.Act.Kind.OnSeries() && config.IsSum(in.series)
			if all || placed.PartitionOf(in.series) == p {
				m := in.m
				if m.Kind == monitor.SettingMessage {
					setup := *m.Setting.Setup
					setup.Partitions = of
					m.Setting.Setup = &setup
				}
				r.publish(m)
			}
		}
		if !disturb {
			c.readers[0].read(1)
			continue
		}
		for random.IntN(2+lag) == 0 {
			p := random.IntN(of)
			if c.readers[p].read(random.IntN(200)); random.IntN(2) == 0 {
				c.deliver(p, random.IntN(40))
			}
			if random.IntN(4) == 0 {
				c.readers[p].restart(t)
			}
		}
	}
	c.finish()
	alerts := map[string]string{}
	for _, r := range c.readers {
		r.restart(t)
		for id, record := range r.store.Records {
			data, err := json.MarshalIndent(record, "", " ")
			if err != nil {
				t.Fatal(err)
			}
			alerts[record.Series+" "+id] = string(data)
		}
		if !r.engine.Account().Balanced() {
			t.Errorf("the account does not balance: %+v", r.engine.Account())
		}
		for _, x := range r.store.Refused {
			if x.Reason == monitor.BadSummary || x.Reason == monitor.SummaryGap {
				t.Errorf("refused %s: %s", x.Reason, x.Detail)
			}
		}
	}
	return alerts
}
