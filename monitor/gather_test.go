package monitor_test

import (
	"encoding/json"
	"flag"
	"fmt"
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

var (
	gatherSeed    = flag.Uint64("gather.seed", 0, "the seed of the streams of gathered sums; 0 for a random one")
	gatherStreams = flag.Int("gather.streams", 5, "how many streams of gathered sums are played, of each kind")
)

const gatherSetup = `
name = "gathered"
folder = "x"
[time]
mode = "history"
[[indicator]]
name = "fall"
series = ["*/*/fall"]
sums = ["{site}/*/fall", "*/{ward}/fall", "**/fall"]
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
sums = ["*/*/error"]
unit = "hours"
per = 1000
every = "1h"
settle = "1h"
horizon = "4d"
windows = ["1d"]
p_limit = 0.01
quiet = 3
events = "each"
exposure = "clock"
clock = { size = 10, per = "1h" }
[indicator.baseline]
kind = "known"
rate = 4
`

// gatherKinds are the ways in which members may count.
var gatherKinds = map[string]string{
	"counted": "p_limit = 0.05\nevents = \"counted\"\n[indicator.baseline]\nkind = \"known\"\nrate = 0.05",
	"clock": "allowance = \"20 in 1y\"\nevents = \"each\"\nexposure = \"clock\"\nclock = { size = 7, per = \"1d\" }\n" +
		"[indicator.baseline]\nkind = \"known\"\nrate = 0.05",
	"census": "p_limit = 0.02\nevents = \"each\"\nexposure = \"census\"\nexpires = \"3d\"\n[indicator.baseline]\nkind = \"known\"\nrate = 0.05",
	"trailing": "p_limit = 0.1\nevents = \"counted\"\n[[indicator.baseline]]\nsums = \"**/fall\"\nkind = \"trailing\"\nspan = \"8d\"\ngap = \"2d\"\nrefresh = \"1w\"\n" +
		"[[indicator.baseline]]\nkind = \"known\"\nrate = 0.05",
	"proportion": "p_limit = 0.05\nmeasure = \"proportion\"\n[indicator.baseline]\nkind = \"known\"\nrate = 0.05",
}

// gatherInput is one input of a stream: for the partition of a series, or of a sum;
// for all where there is none, or where it is an act on all series that match.
type gatherInput struct {
	series string
	m      monitor.Message
}

// TestGatheredSumsDoNotDependOnPartitions plays the same random streams of reports,
// corrections and acts with one, two and five partitions, whose summaries arrive
// in any order between partitions, late, and again, while partitions are
// restarted. The alerts are the same to the byte.
func TestGatheredSumsDoNotDependOnPartitions(t *testing.T) {
	for kind, text := range gatherKinds {
		t.Run(kind, func(t *testing.T) {
			playUntilFound(t, 7, *gatherStreams, func(n int, random *rand.Rand) int {
				settle := []string{"0h", "1d"}[n%2]
				setup, err := config.Parse(fmt.Appendf(nil, gatherSetup, settle, text), "set-up")
				if err != nil {
					t.Fatal(err)
				}
				inputs := gatherStream(random, setup, kind)
				want := playGathered(t, random, setup, inputs, 1, false)
				for _, of := range []int{1, 2, 5} {
					got := playGathered(t, random, setup, inputs, of, true)
					if diff := cmp.Diff(want.alerts, got.alerts); diff != "" {
						t.Fatalf("stream %d: %d partitions (-one +%d):\n%s", n, of, of, diff)
					}
					if diff := cmp.Diff(want.sums, got.sums); diff != "" {
						t.Fatalf("stream %d: %d partitions (-one +%d):\n%s", n, of, of, diff)
					}
				}
				return want.ofSums
			})
		})
	}
}

// playUntilFound plays random streams, in short runs one, and more of them until
// the alerts wanted were found: a stream may hold none. play returns how many it
// compared.
func playUntilFound(t *testing.T, salt uint64, streams int, play func(n int, random *rand.Rand) int) {
	t.Helper()
	seed := *gatherSeed
	if seed == 0 {
		seed = rand.Uint64()
	}
	t.Logf("-gather.seed %d", seed)
	random := rand.New(rand.NewPCG(seed, salt))
	if testing.Short() {
		streams = 1
	}
	found := 0
	for n := 0; n < streams || found == 0 && n < 20*streams; n++ {
		found += play(n, random)
	}
	if found == 0 {
		t.Error("no alert was compared")
	}
	t.Logf("%d alerts", found)
}

// gatherStream makes the inputs of two months, in order of their times.
func gatherStream(random *rand.Rand, setup *config.Setup, kind string) []gatherInput {
	begin := time.Date(2026, 3, 1, 0, 0, 0, 0, time.UTC)
	wards := make([]string, 0, 12)
	for _, site := range []string{"amber", "birch", "cedar", "delta", "elm"} {
		for _, ward := range []string{"a", "b"} {
			wards = append(wards, site+"/"+ward)
		}
	}
	list := []gatherInput{{m: monitor.Message{Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}}}}
	add := func(at time.Time, series string, m monitor.Message) {
		m.Time, m.HasTime = monitor.InstantOf(at), true
		list = append(list, gatherInput{series, m})
	}
	days := 30 + random.IntN(15)
	high := random.IntN(days)
	for day := range days {
		at := begin.AddDate(0, 0, day).Add(time.Duration(random.IntN(3)) * time.Hour)
		for i, ward := range wards {
			if day < i || random.IntN(40) == 0 {
				continue
			}
			at = at.Add(time.Duration(random.IntN(120)) * time.Minute)
			add(at, ward+"/fall", monitor.Message{Items: []monitor.Item{{Observation: gatherReport(random, kind, ward, begin, day, day >= high && day < high+4)}}})
			if random.IntN(4) == 0 {
				o := monitor.Observation{Series: ward + "/error", Start: monitor.InstantOf(at.Add(-time.Hour)), Instant: true, Events: 1 + int64(random.IntN(2)), HasEvents: true}
				o.End = o.Start
				add(at, o.Series, monitor.Message{Items: []monitor.Item{{Observation: o}}})
			}
			if random.IntN(6) == 0 {
				act, on := gatherAct(random, wards, begin, day, at)
				add(at.Add(time.Minute), on, monitor.Message{Kind: monitor.ActMessage, Act: act})
			}
		}
	}
	end := begin.AddDate(0, 0, days+12)
	add(end, "", monitor.Message{Kind: monitor.Tick})
	slices.SortStableFunc(list[1:], func(a, b gatherInput) int { return int(a.m.Time - b.m.Time) })
	return list
}

// gatherReport is a ward's report of a day, sometimes late, and sometimes one
// that takes the place of another.
func gatherReport(random *rand.Rand, kind, ward string, begin time.Time, day int, high bool) monitor.Observation {
	back := 1
	if random.IntN(6) == 0 {
		back = 1 + random.IntN(7)
	}
	if random.IntN(20) == 0 {
		back = 0 // of a day that has only begun
	}
	start := begin.AddDate(0, 0, day-back)
	o := monitor.Observation{
		Series: ward + "/fall", Start: monitor.InstantOf(start), End: monitor.InstantOf(start.Add(time.Hour)),
		Events: int64(random.IntN(3)), HasEvents: random.IntN(50) > 0,
	}
	if high {
		o.Events += int64(random.IntN(2))
	} else {
		o.Events = max(0, o.Events-1-int64(random.IntN(2)))
	}
	if kind != "clock" && random.IntN(50) > 0 {
		o.Exposure, o.HasExposure = config.Decimal{Coef: uint64(4 + random.IntN(9))}, true
	}
	if !o.HasEvents && !o.HasExposure {
		o.HasEvents = true
	}
	if random.IntN(2) == 0 {
		o.ID, o.Revision = fmt.Sprint(day-back-random.IntN(2)), int64(day)
		if other := random.IntN(8); other == 0 {
			o.Series = ward[:strings.IndexByte(ward, '/')] + "/b/fall"
		}
	}
	return o
}

// gatherAct is something that people did to a ward, a sum, or an alert of one.
func gatherAct(random *rand.Rand, wards []string, begin time.Time, day int, at time.Time) (monitor.Act, string) {
	series := wards[random.IntN(len(wards))] + "/fall"
	act := monitor.Act{By: "A. Nurse", Why: "as was said", Series: series}
	from := begin.AddDate(0, 0, day-random.IntN(6))
	act.From = monitor.InstantOf(from)
	what := random.IntN(9)
	if what == 4 && day < 16 {
		what = 8 // not all wards have reported yet, and what nobody heard of is not reset
	}
	switch what {
	case 0:
		act.Kind, act.Until = monitor.OutOfService, monitor.InstantOf(from.AddDate(0, 0, 1+random.IntN(5)))
	case 1:
		act.Kind, act.What = monitor.Change, monitor.Closing
	case 2:
		act.Kind, act.What = monitor.Change, monitor.Opening
	case 3:
		act.Kind, act.Side, act.Until = monitor.SignOff, monitor.BothSides, monitor.InstantOf(from.AddDate(0, 0, 2))
	case 4:
		act.Series = "**/fall"
		act.Kind = monitor.Reset
		if random.IntN(2) == 0 {
			act.Kind, act.What = monitor.Change, monitor.CaseDefinition
		}
	case 5:
		act.Kind, act.What, act.Into = monitor.Change, monitor.Renamed, series[:strings.IndexByte(series, '/')]+"/new/fall"
	default:
		act = monitor.Act{By: act.By, Why: fmt.Sprint("seen on day ", day), Series: []string{"**/fall", "*/a/fall", "*/*/error"}[random.IntN(3)], Direction: life.Upper}
		act.Kind = []monitor.ActKind{monitor.Acknowledge, monitor.Close, monitor.Note, monitor.Mark, monitor.Shelve}[random.IntN(5)]
		if act.Kind == monitor.Mark {
			act.Mark = life.MarkReal
		}
		if act.Kind == monitor.Shelve {
			act.Until = monitor.InstantOf(at.Add(time.Duration(1+random.IntN(100)) * time.Hour))
		}
	}
	return act, act.Series
}

// gathered is what a run left.
type gathered struct {
	alerts map[string]string // JSON of the records, by id
	sums   map[string]string // the slots of the gathered sums
	ofSums int
}

// house is one partition of a run.
type house struct {
	engine *monitor.Engine
	store  *monitor.Memory
	part   monitor.Partition
	n      uint64 // messages
	sent   int    // of what its store holds for others
}

func (h *house) apply(m monitor.Message) {
	h.n++
	m.Position = h.n
	h.engine.Apply(&m)
}

func (h *house) restart(t *testing.T) {
	t.Helper()
	h.store.Commit(h.engine.Drain())
	var err error
	if h.engine, err = h.store.Reopen(h.part); err != nil {
		t.Fatalf("restarting partition %d after %d messages: %v", h.part.Number, h.n, err)
	}
}

// playGathered plays a stream in so many partitions.
func playGathered(t *testing.T, random *rand.Rand, setup *config.Setup, inputs []gatherInput, of int, disturb bool) gathered {
	t.Helper()
	placed := *setup
	placed.Partitions = of
	houses := make([]*house, of)
	for p := range houses {
		part := monitor.Partition{Number: p, Of: of, KeyParts: 1}
		houses[p] = &house{engine: monitor.New(part), store: monitor.NewMemory(), part: part}
	}
	lag := random.IntN(40)
	deliver := func(p, most int) {
		h := houses[p]
		for ; h.sent < len(h.store.Told) && most > 0; most-- {
			out := h.store.Told[h.sent]
			h.sent++
			for repeats := 1 + random.IntN(2); repeats > 0; repeats-- {
				s, err := monitor.DecodeSummary(out.Data)
				if err != nil {
					t.Fatal(err)
				}
				houses[out.Partition].apply(monitor.Message{Kind: monitor.SummaryMessage, Summary: s})
			}
			if random.IntN(6) == 0 {
				h.sent -= min(h.sent, random.IntN(4)) // it was not noted that they arrived
			}
		}
	}
	for _, in := range inputs {
		for p, h := range houses {
			all := in.series == "" || in.m.Kind == monitor.ActMessage && in.m.Act.Kind.OnSeries() && config.IsSum(in.series)
			if all || placed.PartitionOf(in.series) == p {
				h.apply(in.m)
			}
			if disturb && random.IntN(25) == 0 {
				h.restart(t)
			}
		}
		if of > 1 && random.IntN(1+lag) == 0 {
			p := random.IntN(of)
			houses[p].store.Commit(houses[p].engine.Drain())
			deliver(p, 1+random.IntN(30))
		}
	}
	for range 2 {
		for p, h := range houses {
			h.store.Commit(h.engine.Drain())
			deliver(p, len(h.store.Told)*2+100)
		}
	}
	g := gathered{alerts: map[string]string{}, sums: map[string]string{}}
	for _, h := range houses {
		h.restart(t)
		h.store.Commit(h.engine.Drain())
		for id, r := range h.store.Records {
			data, err := json.MarshalIndent(r, "", " ")
			if err != nil {
				t.Fatal(err)
			}
			sum := r.Series == "**/fall" || strings.HasPrefix(r.Series, "*/")
			if sum {
				g.ofSums++
			}
			if sum {
				g.alerts[r.Series+" "+id] = string(data)
			}
		}
		for _, sum := range []string{"**/fall", "*/a/fall", "*/b/fall", "*/new/fall", "*/*/error"} {
			if slots := h.engine.SlotsOf(sum, 9); len(slots) > 0 {
				g.sums[sum] = fmt.Sprint(slots)
			}
		}
		for _, c := range h.engine.Conditions() {
			if c.Kind == monitor.WaitsForPartition {
				t.Errorf("at the end %s: %s", c.Series, c.Text)
			}
		}
		if !h.engine.Account().Balanced() {
			t.Errorf("the account does not balance: %+v", h.engine.Account())
		}
		for _, r := range h.store.Refused {
			if r.Reason == monitor.BadSummary || r.Reason == monitor.SummaryGap {
				t.Errorf("refused %s: %s", r.Reason, r.Detail)
			}
		}
	}
	return g
}
