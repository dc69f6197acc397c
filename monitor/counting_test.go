package monitor_test

import (
	"encoding/json"
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

const countingSetup = `
name = "counting"
folder = "x"
[time]
mode = "history"
[[indicator]]
name = "fall"
series = ["*/fall"]
unit = "bed-days"
every = "1d"
settle = "2h"
horizon = "9d"
windows = ["3d"]
quiet = 2
%s
`

const countingPeers = "p_limit = 0.4\n[indicator.baseline]\nkind = \"peers\"\nspan = \"10d\"\nrefresh = \"1w\"\n"

// countingShared lets one alert a day come by chance, so that limits are lax.
const countingShared = "allowance = \"300 in 1y\"\nallowance_for = \"indicator\"\nreserve = 0.2\n[indicator.baseline]\nkind = \"known\"\nrate = 0.1\n"

func countingSetupOf(t *testing.T, text string, partitions int) *config.Setup {
	t.Helper()
	setup, err := config.Parse(fmt.Appendf(nil, countingSetup, text), "set-up")
	if err != nil {
		t.Fatal(err)
	}
	setup.Partitions = partitions
	return setup
}

// wardOf is a series that lies in a partition, told apart by a number.
func wardOf(partition, of, number int) string {
	for i := 0; ; i++ {
		if site := fmt.Sprintf("ward-%d-%d", number, i); config.PartitionOf(site, 1, of) == partition {
			return site + "/fall"
		}
	}
}

func marchDay(day int) time.Time { return time.Date(2026, 3, day, 0, 0, 0, 0, time.UTC) }

// report tells of a day of March, an hour after its end.
func report(series string, day int, events int64, exposure uint64) monitor.Observation {
	start := marchDay(day)
	return monitor.Observation{
		Series: series, Start: monitor.InstantOf(start), End: monitor.InstantOf(start.AddDate(0, 0, 1)),
		Reported: monitor.InstantOf(start.AddDate(0, 0, 1).Add(time.Hour)), HasReported: true,
		Events: events, HasEvents: true, Exposure: config.Decimal{Coef: exposure}, HasExposure: true,
	}
}

func messageOf(list ...monitor.Observation) monitor.Message {
	m := monitor.Message{Kind: monitor.Observations}
	for _, o := range list {
		m.Items = append(m.Items, monitor.Item{Observation: o})
	}
	return m
}

// records returns those of all alerts of a run.
func (c *cross) records() map[string]life.Record {
	all := map[string]life.Record{}
	for _, r := range c.readers {
		r.store.Commit(r.engine.Drain())
		for id, x := range r.store.Records {
			all[x.Series+" "+id] = x
		}
	}
	return all
}

func texts(t *testing.T, records map[string]life.Record) map[string]string {
	t.Helper()
	list := map[string]string{}
	for id, r := range records {
		data, err := json.MarshalIndent(r, "", " ")
		if err != nil {
			t.Fatal(err)
		}
		list[id] = string(data)
	}
	return list
}

// TestPeersOfAllPartitions holds what alerts say of their peers against sums over the
// very reports: those of all other wards, counted the day before the week began.
func TestPeersOfAllPartitions(t *testing.T) {
	seed := rand.Uint64()
	t.Logf("seed %d", seed)
	random := rand.New(rand.NewPCG(seed, 3))
	const of, days = 3, 29
	c := newCross(t, random, of)
	setup := countingSetupOf(t, countingPeers, of)
	for _, r := range c.readers {
		r.publish(monitor.Message{Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
	}
	var all []monitor.Observation
	for day := 1; day <= days; day++ {
		for ward := range 9 {
			if day < 3*ward { // they begin one after another
				continue
			}
			o := report(wardOf(ward%of, of, ward), day, int64(random.IntN(4)), uint64(5+random.IntN(9)))
			all = append(all, o)
			c.readers[ward%of].publish(messageOf(o))
		}
	}
	for _, r := range c.readers {
		r.publish(monitor.Message{Kind: monitor.Tick, Time: monitor.InstantOf(marchDay(days + 2)), HasTime: true})
	}
	c.finish()
	checked := 0
	for _, r := range c.records() {
		ev := r.Opening
		begin := ev.To // the boundary of the look
		sum := func(counted time.Time, but string) (events int64, exposure uint64, wards map[string]bool) {
			wards = map[string]bool{}
			for _, o := range all {
				if day := o.Start.Time(); o.Series != but && !day.Before(counted.AddDate(0, 0, -10)) && day.Before(counted) {
					events, exposure, wards[o.Series] = events+o.Events, exposure+o.Exposure.Coef, true
				}
			}
			return events, exposure, wards
		}
		counted := begin.AddDate(0, 0, -(int(begin.Weekday())+6)%7-1) // the day before Monday
		for ; counted.Before(begin.AddDate(0, 0, -1)); counted = counted.AddDate(0, 0, 1) {
			if events, _, wards := sum(counted, ""); events > 0 && len(wards) > 1 {
				break // it serves for the week
			}
		}
		from := counted.AddDate(0, 0, -10)
		events, exposure, wards := sum(counted, r.Series)
		b := ev.Baseline
		if b.Events != events || b.Exposure != fmt.Sprint(exposure) || b.Peers != int64(len(wards)) || !b.To.Equal(counted) || !b.From.Equal(from) {
			t.Errorf("%s at %s: %d in %s, %d peers, %s to %s; want %d in %d, %d, %s to %s", r.Series, begin.Format(time.DateOnly),
				b.Events, b.Exposure, b.Peers, b.From.Format(time.DateOnly), b.To.Format(time.DateOnly), events, exposure, len(wards), from.Format(time.DateOnly), counted.Format(time.DateOnly))
		}
		checked++
	}
	if checked < 5 {
		t.Errorf("only %d alerts were checked", checked)
	}
}

// TestMessagesOfManyDays feeds each partition one message of ten days without a
// time of its own, and lets one of them begin later: none waits for ever, whatever
// the restarts, and the alerts are those of one partition.
func TestMessagesOfManyDays(t *testing.T) {
	for _, text := range []string{countingPeers, countingShared} {
		var want map[string]string
		for _, restarts := range []bool{false, true} {
			for _, of := range []int{1, 2, 3} {
				random := rand.New(rand.NewPCG(1, uint64(of)))
				c := newCross(t, random, of)
				setup := countingSetupOf(t, text, of)
				batches := make([][]monitor.Observation, of)
				for day := 1; day <= 20; day++ {
					for ward := range 6 {
						if ward%3 == 2 && day < 6 {
							continue
						}
						name := wardOf(ward%2, 2, ward)
						if ward%3 == 2 {
							name = wardOf(2, 3, ward)
						}
						events := int64((ward*day*7 + day*day) % 3)
						if (ward+day)%6 == 0 || day == 9+ward {
							events += 6
						}
						p := config.PartitionOf(name[:strings.IndexByte(name, '/')], 1, of)
						batches[p] = append(batches[p], report(name, day, events, 7))
					}
				}
				for p, r := range c.readers {
					r.publish(monitor.Message{Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
					if of == 1 { // in order of their times
						for i := range batches[p] {
							r.publish(messageOf(batches[p][i]))
						}
					} else {
						for chunk := range slices.Chunk(batches[p], 25+p) {
							r.publish(messageOf(chunk...))
						}
					}
					r.publish(monitor.Message{Kind: monitor.Tick, Time: monitor.InstantOf(marchDay(25)), HasTime: true})
				}
				for restarts && c.step() {
					for _, r := range c.readers {
						r.restart(t)
					}
				}
				c.finish()
				got := texts(t, c.records())
				if want == nil {
					want = got
				}
				if diff := cmp.Diff(want, got); diff != "" || len(got) == 0 {
					t.Errorf("%d partitions, %d alerts (-one +%d):\n%s", of, len(got), of, diff)
				}
				for _, r := range c.readers {
					if a := r.engine.Account(); !a.Balanced() || a.Refused > 0 {
						t.Errorf("the account is %+v", a)
					}
				}
			}
		}
	}
}

// step lets every partition read one message and tell what it has to, and reports
// whether anything happened.
func (c *cross) step() bool {
	moved := false
	for p, r := range c.readers {
		if r.read(1)+c.deliver(p, 1<<30) > 0 {
			moved = true
		}
	}
	return moved
}

// liveDay lets partitions hear of a day in live time, at its end and when it is
// looked at.
func liveDay(readers []*reader, day int, observations ...monitor.Observation) {
	end := marchDay(day + 1)
	for _, r := range readers {
		for _, o := range observations {
			if o.Start == monitor.InstantOf(marchDay(day)) && config.PartitionOf(o.Series[:strings.IndexByte(o.Series, '/')], 1, r.part.Of) == r.part.Number {
				m := messageOf(o)
				m.Stored = monitor.InstantOf(end.Add(time.Hour))
				r.publish(m)
			}
		}
		r.publish(monitor.Message{Kind: monitor.Tick, Stored: monitor.InstantOf(end.Add(2*time.Hour + time.Minute))})
		r.read(1 << 30)
	}
}

func waitsFor(e *monitor.Engine, partition int) bool {
	return slices.ContainsFunc(e.Conditions(), func(c monitor.Condition) bool {
		return c.Kind == monitor.WaitsForPartition && strings.HasSuffix(c.Text, fmt.Sprintf("partition %d has to tell", partition))
	})
}

// TestLiveTimeNeverWaits lets a partition tell nothing for days: the other goes on
// with what was counted before, and says whose count it lacks until it comes.
func TestLiveTimeNeverWaits(t *testing.T) {
	c := newCross(t, rand.New(rand.NewPCG(1, 1)), 2)
	setup := countingSetupOf(t, strings.Replace(countingPeers, "1w", "1d", 1), 2)
	here, there := wardOf(0, 2, 1), wardOf(1, 2, 2)
	other := wardOf(0, 2, 3)
	for _, r := range c.readers {
		r.publish(monitor.Message{Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
		r.publish(monitor.Message{Kind: monitor.Live, Stored: monitor.InstantOf(marchDay(1))})
	}
	home := c.readers[0]
	peersOf := func(series string) string {
		home.store.Commit(home.engine.Drain())
		var last *life.Record
		for _, r := range home.store.Records {
			if r.Series == series && (last == nil || r.Opened.After(last.Opened)) {
				last = &r
			}
		}
		if last == nil {
			return "no alert"
		}
		b := last.Opening.Baseline
		return fmt.Sprintf("%d peers until %s", b.Peers, b.To.Format("2 Jan"))
	}
	day := func(n int, tell bool) {
		events := int64(0)
		if n == 8 || n == 13 {
			events = 6
		}
		liveDay(c.readers, n, report(here, n, events, 9), report(other, n, 1, 9), report(there, n, 1, 9))
		if tell {
			c.deliver(0, 1<<30)
			c.deliver(1, 1<<30)
		}
		for _, r := range c.readers {
			r.read(1 << 30)
			r.restart(t)
		}
	}
	for n := 1; n <= 8; n++ {
		day(n, true)
	}
	if got := peersOf(here); got != "2 peers until 8 Mar" {
		t.Errorf("while all tell: %s", got)
	}
	if waitsFor(home.engine, 1) {
		t.Error("while all tell one is waited for")
	}
	for n := 9; n <= 14; n++ {
		day(n, false)
		if got, want := waitsFor(home.engine, 1), n > 9; got != want {
			t.Errorf("after day %d it waits: %t", n, got)
		}
	}
	if got := peersOf(here); got != "2 peers until 9 Mar" {
		t.Errorf("when one has not told: %s", got)
	}
	if got := home.engine.WaitsFor(); !slices.Equal(got, []int{1}) {
		t.Errorf("it waits for %v", got)
	}
	c.deliver(1, 1<<30)
	home.read(1 << 30)
	home.restart(t)
	if waitsFor(home.engine, 1) || len(home.engine.WaitsFor()) > 0 {
		t.Error("it still waits for what has come")
	}
	for _, r := range home.store.Refused {
		t.Errorf("refused %s: %s", r.Reason, r.Detail)
	}
}

// TestCountsThatAreMissing loses a count in live time: that is recorded, and the
// numbers of that day are not taken.
func TestCountsThatAreMissing(t *testing.T) {
	c := newCross(t, rand.New(rand.NewPCG(1, 1)), 2)
	setup := countingSetupOf(t, countingShared, 2)
	for _, r := range c.readers {
		r.publish(monitor.Message{Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
		r.publish(monitor.Message{Kind: monitor.Live, Stored: monitor.InstantOf(marchDay(1))})
	}
	for n := 1; n <= 9; n++ {
		liveDay(c.readers, n, report(wardOf(0, 2, 1), n, 1, 9), report(wardOf(1, 2, 2), n, 1, 9))
		far := c.readers[1]
		if far.store.Commit(far.engine.Drain()); n == 5 {
			far.sent = len(far.store.Told)
		}
		c.deliver(1, 1<<30)
		c.readers[0].read(1 << 30)
		c.readers[0].restart(t)
	}
	var reasons []monitor.Reason
	for _, r := range c.readers[0].store.Refused {
		reasons = append(reasons, r.Reason)
	}
	if !slices.Equal(reasons, []monitor.Reason{monitor.SummaryGap}) {
		t.Errorf("refused %v", reasons)
	}
	if waitsFor(c.readers[0].engine, 1) {
		t.Error("it waits for what is lost")
	}
}

// TestCountsOfNobody checks that a partition takes no counts of its own, or of sums
// that others gather.
func TestCountsOfNobody(t *testing.T) {
	c := newCross(t, rand.New(rand.NewPCG(1, 1)), 2)
	setup := countingSetupOf(t, countingShared, 2)
	for _, r := range c.readers {
		r.publish(monitor.Message{Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
	}
	r := c.readers[0]
	r.publish(messageOf(report(wardOf(0, 2, 1), 1, 1, 9)))
	r.read(1 << 30)
	r.store.Commit(r.engine.Drain())
	for _, out := range r.store.Told {
		s, err := monitor.DecodeSummary(out.Data)
		if err != nil {
			t.Fatal(err)
		}
		r.publish(monitor.Message{Kind: monitor.SummaryMessage, Summary: s})
	}
	r.read(1 << 30)
	r.store.Commit(r.engine.Drain())
	if len(r.store.Told) == 0 || len(r.store.Refused) != len(r.store.Told) || r.store.Refused[0].Reason != monitor.BadSummary {
		t.Errorf("told %d, refused %+v", len(r.store.Told), r.store.Refused)
	}
}

// TestStoreOfBeforeCounts opens a store that was written when nothing was counted
// for others: it begins to count, and peers are in force soon.
func TestStoreOfBeforeCounts(t *testing.T) {
	part := monitor.Partition{Of: 1} // all of its series lie in one: so they did for old stores
	store, e := monitor.NewMemory(), monitor.New(part)
	setup := countingSetupOf(t, countingPeers, 1)
	n := uint64(0)
	apply := func(m monitor.Message) {
		n++
		m.Position = n
		e.Apply(&m)
	}
	day := func(day int, events int64) {
		for ward := range 4 {
			apply(messageOf(report(wardOf(0, 1, ward), day, events, 9)))
		}
	}
	apply(monitor.Message{Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
	for d := 1; d <= 12; d++ {
		day(d, 1)
	}
	store.Commit(e.Drain())
	part.KeyParts = 1
	var err error
	for d := 13; d <= 22; d++ {
		if e, err = store.Reopen(part); err != nil {
			t.Fatal(err)
		}
		day(d, int64(1+d/20))
		store.Commit(e.Drain())
	}
	alerts := 0
	for _, r := range store.Records {
		if b := r.Opening.Baseline; b.Peers == 3 && b.Events == 30 {
			alerts++
		}
	}
	if alerts == 0 {
		t.Errorf("nothing signals by peers that were counted: %+v", store.Records)
	}
}

// TestGoingLiveOneAfterAnother lets a partition go live while the other has most of its
// history before it: neither waits for ever.
func TestGoingLiveOneAfterAnother(t *testing.T) {
	c := newCross(t, rand.New(rand.NewPCG(1, 1)), 2)
	setup := countingSetupOf(t, countingPeers, 2)
	live := func(day int) monitor.Message {
		return monitor.Message{Kind: monitor.Live, Stored: monitor.InstantOf(marchDay(day))}
	}
	for p, r := range c.readers {
		r.publish(monitor.Message{Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
		for day := 1; day <= 4+10*p; day++ {
			r.publish(messageOf(report(wardOf(p, 2, p), day, 1, 9)))
		}
		r.publish(live(40))
	}
	c.finish()
	for _, r := range c.readers {
		if m := live(50); r.engine.InHistory() || r.engine.Holds(&m) || len(r.engine.WaitsFor()) > 0 {
			t.Errorf("partition %d: in history %t, waits for %v", r.part.Number, r.engine.InHistory(), r.engine.WaitsFor())
		}
	}
}

// TestSetupWithoutATime brings a further indicator in the middle of a history, where
// the partitions stand days apart: neither waits for ever for the other to come to
// that set-up.
func TestSetupWithoutATime(t *testing.T) {
	c := newCross(t, rand.New(rand.NewPCG(1, 1)), 2)
	further := strings.ReplaceAll(strings.SplitN(fmt.Sprintf(countingSetup, countingShared), "[[indicator]]", 2)[1], "fall", "slip")
	for p, r := range c.readers {
		r.publish(monitor.Message{Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: countingSetupOf(t, countingPeers, 2)}})
		for day := 1; day <= 3+20*p; day++ {
			r.publish(messageOf(report(wardOf(p, 2, p), day, 1, 9)))
		}
		r.publish(monitor.Message{Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: countingSetupOf(t, countingPeers+"[[indicator]]\n"+further, 2)}})
		for day := 4 + 20*p; day <= 28; day++ {
			slip := report(strings.Replace(wardOf(p, 2, p), "fall", "slip", 1), day, 1, 9)
			r.publish(messageOf(report(wardOf(p, 2, p), day, 1, 9), slip))
		}
		r.publish(monitor.Message{Kind: monitor.Tick, Time: monitor.InstantOf(marchDay(31)), HasTime: true})
	}
	c.finish()
	for _, r := range c.readers {
		if a := r.engine.Account(); !a.Balanced() || a.Refused > 0 || len(r.engine.WaitsFor()) > 0 {
			t.Errorf("partition %d waits for %v: %+v", r.part.Number, r.engine.WaitsFor(), a)
		}
	}
}

// TestIndicatorThatGoes takes a counted indicator out of the set-up, and in again: one
// partition comes to that while the other is days behind.
func TestIndicatorThatGoes(t *testing.T) {
	c := newCross(t, rand.New(rand.NewPCG(1, 1)), 2)
	with := countingSetupOf(t, countingPeers, 2)
	without, err := config.Parse([]byte(strings.ReplaceAll(fmt.Sprintf(countingSetup, countingShared), "fall", "slip")), "set-up")
	if err != nil {
		t.Fatal(err)
	}
	without.Partitions = 2
	for p, r := range c.readers {
		for n, setup := range []*config.Setup{with, without, with} { // the very same as before
			r.publish(monitor.Message{Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
			for day := 10*n + 1; day <= 10*n+7+2*p; day++ {
				o := report(wardOf(p, 2, p), day, 1, 9)
				if n == 1 {
					o.Series = strings.Replace(o.Series, "fall", "slip", 1)
				}
				r.publish(messageOf(o))
			}
		}
		r.publish(monitor.Message{Kind: monitor.Tick, Time: monitor.InstantOf(marchDay(31)), HasTime: true})
	}
	c.finish()
	for _, r := range c.readers {
		r.restart(t)
		if a := r.engine.Account(); !a.Balanced() || a.Refused > 0 || len(r.engine.WaitsFor()) > 0 {
			t.Errorf("partition %d waits for %v: %+v", r.part.Number, r.engine.WaitsFor(), a)
		}
		if n := r.engine.Countings(); n != 1 {
			t.Errorf("partition %d knows of %d counts", r.part.Number, n)
		}
		for _, x := range r.store.Refused {
			t.Errorf("refused %s: %s", x.Reason, x.Detail)
		}
	}
}
