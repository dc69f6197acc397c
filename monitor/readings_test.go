package monitor_test

import (
	"fmt"
	"math/rand/v2"
	"slices"
	"strings"
	"testing"

	"tailbell/config"
	"tailbell/monitor"
)

const minute = 60_000_000

// reckoned is what a slot must hold: counted by hand from the rules in the README,
// one reading after the other, without the engine's ways.
type reckoned struct {
	events, exposure int64
	says             [2]int
}

type reckoning struct {
	slots  map[int64]*reckoned
	latest [2]*counterReading
	clear  [2]int64
	counts map[string]int
}

type counterReading struct {
	at, since int64
	hasSince  bool
	totals    [2]int64
	has       [2]bool
}

func (k *reckoning) slot(n int64) *reckoned {
	if k.slots[n] == nil {
		k.slots[n] = &reckoned{}
	}
	return k.slots[n]
}

// whole lists the slots of a minute that lie within [from, to].
func whole(from, to int64) (list []int64) {
	for s := from / minute; s*minute < to; s++ {
		if s*minute >= from && (s+1)*minute <= to {
			list = append(list, s)
		}
	}
	return list
}

func (k *reckoning) read(r counterReading) {
	paired := r.has[0] && r.has[1] && (k.latest[0] == nil) == (k.latest[1] == nil) && (k.latest[0] == nil || k.latest[0].at == k.latest[1].at)
	far := func(from int64) bool {
		if paired {
			return len(whole(from, r.at)) > 1
		}
		return from/minute != (r.at-1)/minute && r.at-from > minute/2
	}
	isNew, repeat, restarted, conflict := false, true, false, false
	for i := range r.has {
		l := k.latest[i]
		if !r.has[i] {
			continue
		}
		isNew = isNew || l == nil || r.at > l.at
		repeat = repeat && l != nil && r.at == l.at
		conflict = conflict || l != nil && r.at == l.at && r.totals[i] != l.totals[i]
		restarted = restarted || paired && l != nil && r.at > l.at && (r.totals[i] < l.totals[i] || r.hasSince && r.since > l.at)
	}
	switch {
	case conflict:
		k.counts["refused"]++
		return
	case !isNew && repeat:
		k.counts["repeat"]++
		return
	case !isNew:
		k.counts["outdated"]++
		return
	}
	placed, end := false, (r.at-1)/minute
	gap := false
	for i := range r.has {
		l := k.latest[i]
		if !r.has[i] || l != nil && r.at <= l.at {
			continue
		}
		again := restarted || l != nil && (r.totals[i] < l.totals[i] || r.hasSince && r.since > l.at)
		from, more, known := r.at, int64(0), false
		switch {
		case l != nil && !again:
			from, more, known = l.at, r.totals[i]-l.totals[i], true
		case r.hasSince && r.since < r.at:
			from, more, known = r.since, r.totals[i], true
		case l != nil && !r.hasSince:
			from, more, known = l.at, r.totals[i], true
		}
		known = known && !far(from)
		if l == nil || far(l.at) || !known { // counting begins with this one
			if k.clear[i] = -1 << 60; !paired {
				k.clear[i] = (r.at + minute - 1) / minute
				if known {
					k.clear[i] = (from + minute - 1) / minute
				}
			}
		}
		if l != nil && (far(l.at) || !known) && !paired { // the slot was covered in part only
			if s := k.slots[l.at/minute]; s != nil {
				s.says[i] = 0
			}
		}
		gap = gap || l != nil && far(l.at)
		copied := r
		k.latest[i] = &copied
		if !known || end < k.clear[i] {
			continue
		}
		placed = true
		for _, s := range whole(from, r.at) {
			if s != end && s >= k.clear[i] {
				k.slot(s).says[i]++
			}
		}
		s := k.slot(end)
		s.says[i]++
		if i == 0 {
			s.events += more
		} else {
			s.exposure += more
		}
	}
	if gap {
		k.counts["gaps"]++
	}
	if placed {
		k.counts["placed"]++
	} else {
		k.counts["began"]++
	}
}

// The engine counts readings as the rules say, in whatever order they come, and
// after restarts.
func TestReadingsAreReckoned(t *testing.T) {
	for _, exposure := range []string{`"reported"`, "\"clock\"\nclock = { size = 1, per = \"1h\" }"} {
		setup, err := config.Parse([]byte(strings.Replace(counterSetup, "EXPOSURE", exposure, 1)), "test")
		if err != nil {
			t.Fatal(err)
		}
		for range 150 {
			seed := rand.Uint64()
			if err := reckon(setup, rand.New(rand.NewPCG(seed, 0))); err != nil {
				t.Fatalf("exposure %s, seed %d: %v", exposure, seed, err)
			}
		}
	}
}

const counterSetup = `
name = "counters"
folder = "x"
[time]
mode = "history"
[limits]
max_series = 10
[[indicator]]
name = "failure"
series = ["ferrybill/*"]
unit = "requests"
every = "1m"
events = "counted"
exposure = EXPOSURE
settle = "1m"
horizon = "2d"
grain = 1
windows = ["2m"]
p_limit = 0.0001
[indicator.baseline]
kind = "known"
rate = 0.001
`

func reckon(setup *config.Setup, r *rand.Rand) error {
	byClock := setup.Indicators[0].Exposure == config.Clock
	begin := int64(1_772_445_600_000_000) // 2026-03-02T10:00:00Z
	readings := invent(r, begin, byClock)
	k := reckoning{slots: map[int64]*reckoned{}, counts: map[string]int{}}
	store := monitor.NewMemory()
	e := monitor.New(monitor.Partition{Of: 1, KeyParts: 1})
	e.Apply(&monitor.Message{Position: 1, Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
	for i, x := range readings {
		k.read(x)
		o := monitor.Observation{
			Series: "ferrybill/pay", Start: monitor.Instant(x.at), End: monitor.Instant(x.at), Instant: true, Reading: true,
			Events: x.totals[0], HasEvents: x.has[0], Exposure: config.Decimal{Coef: uint64(x.totals[1])}, HasExposure: x.has[1],
			Since: monitor.Instant(x.since), HasSince: x.hasSince,
		}
		e.Apply(&monitor.Message{Position: uint64(i + 2), Kind: monitor.Observations, Items: []monitor.Item{{Observation: o}}})
		if r.IntN(4) == 0 {
			store.Commit(e.Drain())
			var err error
			if e, err = store.Reopen(monitor.Partition{Of: 1, KeyParts: 1}); err != nil {
				return err
			}
		}
	}
	return k.compare(e, len(readings))
}

func (k *reckoning) compare(e *monitor.Engine, elements int) error {
	a := e.Account()
	if !a.Balanced() || a.Elements != int64(elements) {
		return fmt.Errorf("the account does not balance: %+v", a)
	}
	have := map[string]int64{
		"placed": a.Counted + a.Withheld, "began": a.Began, "gaps": a.Gaps, "repeat": a.Repeat, "outdated": a.Outdated, "refused": a.Refused,
	}
	for name, n := range have {
		if int64(k.counts[name]) != n {
			return fmt.Errorf("%s: the reckoning says %d, the account %d", name, k.counts[name], n)
		}
	}
	seen := 0
	for _, s := range e.Slots() {
		want := k.slots[int64(s.Start)/minute]
		if want == nil {
			return fmt.Errorf("slot %v: nothing was reckoned, the engine has %+v", s.Start.Time(), s)
		}
		seen++
		if s.Events != want.events || s.Exposure != fmt.Sprint(want.exposure) || s.HasEvents != (want.says[0] > 0) || s.HasExposure != (want.says[1] > 0) {
			return fmt.Errorf("slot %v: reckoned %+v, the engine has %+v", s.Start.Time(), *want, s)
		}
	}
	if seen != len(k.slots) {
		return fmt.Errorf("%d slots were reckoned, the engine has %d", len(k.slots), seen)
	}
	return nil
}

// invent plays two counters that are read now and then.
func invent(r *rand.Rand, begin int64, byClock bool) []counterReading {
	var list []counterReading
	together := r.IntN(3) > 0
	tells, pace := r.IntN(2) == 0, []int64{5_000_000, 15_000_000, 40_000_000, minute}[r.IntN(4)]
	now, since := begin+r.Int64N(minute), begin-r.Int64N(3*minute)
	totals := [2]int64{r.Int64N(5), r.Int64N(50)}
	for range 10 + r.IntN(60) {
		step := pace + r.Int64N(pace/4+1) - pace/8
		switch r.IntN(12) {
		case 0:
			step = r.Int64N(5 * minute)
		case 1:
			step = minute - now%minute
		}
		now += max(step, 1)
		if r.IntN(10) == 0 { // counting begins again
			since = now - r.Int64N(max(step, 1)*2)
			totals = [2]int64{}
		}
		totals[0], totals[1] = totals[0]+r.Int64N(4), totals[1]+r.Int64N(200)
		x := counterReading{at: now, totals: totals, has: [2]bool{true, !byClock}}
		if x.hasSince = tells && r.IntN(8) > 0; x.hasSince {
			x.since = min(now, since+r.Int64N(2)*r.Int64N(1000))
		}
		if !together && !byClock {
			x.has = [2]bool{r.IntN(2) == 0, true}
			x.has[1] = !x.has[0] || r.IntN(3) == 0
		}
		list = append(list, x)
		if r.IntN(10) == 0 {
			list = append(list, list[r.IntN(len(list))]) // again
		}
		if n := len(list); r.IntN(12) == 0 && n > 1 {
			list[n-1], list[n-2] = list[n-2], list[n-1]
		}
		if r.IntN(30) == 0 {
			again := list[r.IntN(len(list))]
			again.totals[0]++
			list = append(list, again)
		}
	}
	return slices.Clip(list)
}
