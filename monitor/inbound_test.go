package monitor_test

import (
	"fmt"
	"slices"
	"strings"
	"testing"
	"time"

	"tailbell/config"
	"tailbell/monitor"
)

const inboundSetup = `
name = "inbound"
folder = "x"
[time]
mode = "history"
[[indicator]]
name = "fall"
series = ["*/*/fall"]
sums = ["*/*/fall"]
unit = "bed-days"
every = "1d"
settle = "2h"
horizon = "9d"
windows = ["2d"]
p_limit = 0.01
quiet = 2
[indicator.baseline]
kind = "known"
rate = 0.05
`

// pair are two partitions, of which one gathers sums.
type pair struct {
	t         *testing.T
	home, far *house
	series    map[*house]string // one of each
	setup     *config.Setup
}

func newPair(t *testing.T) *pair {
	t.Helper()
	setup, err := config.Parse([]byte(inboundSetup), "set-up")
	if err != nil {
		t.Fatal(err)
	}
	setup.Partitions = 2
	p := &pair{t: t, setup: setup, series: map[*house]string{}}
	for n := range 2 {
		part := monitor.Partition{Number: n, Of: 2, KeyParts: 1}
		h := &house{engine: monitor.New(part), store: monitor.NewMemory(), part: part}
		if n == setup.HomeOf("fall") {
			p.home = h
		} else {
			p.far = h
		}
		for i := 0; p.series[h] == ""; i++ {
			if site := fmt.Sprint("site-", i); config.PartitionOf(site, 1, 2) == n {
				p.series[h] = site + "/a/fall"
			}
		}
	}
	p.set(setup)
	return p
}

func (p *pair) set(setup *config.Setup) {
	for _, h := range []*house{p.home, p.far} {
		h.apply(monitor.Message{Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
	}
}

// day reports three falls of a day of March, at its end, to one of them.
func (p *pair) day(h *house, day int) {
	start := time.Date(2026, 3, day, 0, 0, 0, 0, time.UTC)
	o := monitor.Observation{
		Series: p.series[h], Start: monitor.InstantOf(start), End: monitor.InstantOf(start.AddDate(0, 0, 1)),
		Events: 3, HasEvents: true, Exposure: config.Decimal{Coef: 10}, HasExposure: true,
	}
	h.apply(monitor.Message{Items: []monitor.Item{{Observation: o}}, Time: monitor.InstantOf(start.AddDate(0, 0, 1).Add(time.Hour)), HasTime: true})
}

// told returns what the far one has to tell since the last time, as others get it.
func (p *pair) told() (list []*monitor.Summary) {
	p.t.Helper()
	p.far.store.Commit(p.far.engine.Drain())
	for ; p.far.sent < len(p.far.store.Told); p.far.sent++ {
		s, err := monitor.DecodeSummary(p.far.store.Told[p.far.sent].Data)
		if err != nil {
			p.t.Fatal(err)
		}
		list = append(list, s)
	}
	return list
}

func (p *pair) hand(list ...*monitor.Summary) {
	for _, s := range list {
		p.home.apply(monitor.Message{Kind: monitor.SummaryMessage, Summary: s})
	}
}

// known is up to where the sum is known, and how many alerts it has.
func (p *pair) known() string {
	slots := p.home.engine.SlotsOf("*/*/fall", 20)
	if len(slots) == 0 {
		return "nothing"
	}
	return fmt.Sprintf("%s: %d", slots[0].Start.Format("2 Jan"), slots[0].Events)
}

func (p *pair) waits() bool {
	return slices.ContainsFunc(p.home.engine.Conditions(), func(c monitor.Condition) bool {
		return c.Kind == monitor.WaitsForPartition && strings.Contains(c.Text, fmt.Sprint("partition ", p.far.part.Number))
	})
}

// TestSumsWaitForPartitions checks that a sum is not looked at before all have
// told, says for which it waits, and that what comes again is counted as such.
func TestSumsWaitForPartitions(t *testing.T) {
	p := newPair(t)
	for day := 1; day <= 4; day++ {
		p.day(p.home, day)
		p.day(p.far, day)
	}
	if got := p.known(); got != "nothing" {
		t.Errorf("before anything was told the sum is known: %s", got)
	}
	list := p.told()
	p.hand(list...)
	if got := p.known(); got != "3 Mar: 6" || p.waits() {
		t.Errorf("the sum is known as %s, waits %t", got, p.waits())
	}
	p.home.restart(t)
	p.day(p.home, 5)
	if got := p.known(); got != "3 Mar: 6" || !p.waits() {
		t.Errorf("ahead of the other the sum is known as %s, waits %t", got, p.waits())
	}
	p.day(p.far, 5)
	p.home.restart(t)
	p.hand(p.told()...)
	if got := p.known(); got != "4 Mar: 6" || p.waits() {
		t.Errorf("then the sum is known as %s, waits %t", got, p.waits())
	}
	before := p.home.engine.Account()
	p.hand(list...)
	if a := p.home.engine.Account(); a.SummaryRepeats != before.SummaryRepeats+int64(len(list)) || a.Summaries != before.Summaries || p.known() != "4 Mar: 6" {
		t.Errorf("repeats are counted as %+v", a)
	}
}

// TestSummariesThatAreMissing checks that a gap is recorded, and gone on from.
func TestSummariesThatAreMissing(t *testing.T) {
	p := newPair(t)
	for day := 1; day <= 6; day++ {
		p.day(p.home, day)
		p.day(p.far, day)
		list := p.told()
		if day != 4 {
			p.hand(list...)
		}
		p.home.restart(t)
	}
	var reasons []monitor.Reason
	for _, r := range p.home.store.Refused {
		reasons = append(reasons, r.Reason)
	}
	if !slices.Equal(reasons, []monitor.Reason{monitor.SummaryGap}) || p.known() != "5 Mar: 6" {
		t.Errorf("refused %v, the sum is known as %s", reasons, p.known())
	}
}

// TestSummariesOfNobody checks that a partition takes no summaries that are not
// for it.
func TestSummariesOfNobody(t *testing.T) {
	p := newPair(t)
	p.day(p.far, 1)
	p.day(p.far, 2)
	for _, s := range p.told() {
		p.far.apply(monitor.Message{Kind: monitor.SummaryMessage, Summary: s})
	}
	p.far.store.Commit(p.far.engine.Drain())
	if len(p.far.store.Refused) == 0 || p.far.store.Refused[0].Reason != monitor.BadSummary || len(p.far.store.Refused[0].Raw) == 0 {
		t.Errorf("refused %+v", p.far.store.Refused)
	}
	if a := p.far.engine.Account(); !a.Balanced() || a.Summaries > 0 {
		t.Errorf("the account is %+v", a)
	}
}

// TestGatheringEndsAndBeginsAnew takes the indicator out of the set-up and in again:
// the sum begins anew, also where summaries of before come late.
func TestGatheringEndsAndBeginsAnew(t *testing.T) {
	p := newPair(t)
	for day := 1; day <= 3; day++ {
		p.day(p.home, day)
		p.day(p.far, day)
	}
	late := p.told()
	p.hand(late[:1]...)
	other, err := config.Parse([]byte(strings.NewReplacer(`"fall"`, `"error"`, "/fall", "/error").Replace(inboundSetup)), "set-up")
	if err != nil {
		t.Fatal(err)
	}
	other.Partitions = 2
	p.set(other)
	p.home.restart(t)
	p.far.restart(t)
	p.hand(late[1:]...)
	p.hand(p.told()...)
	if got := p.known(); got != "nothing" {
		t.Errorf("of a sum that is monitored no longer %s is known", got)
	}
	again, err := config.Parse([]byte(strings.Replace(inboundSetup, "p_limit = 0.01", "p_limit = 0.02", 1)), "set-up")
	if err != nil {
		t.Fatal(err)
	}
	again.Partitions = 2
	p.set(again)
	for day := 8; day <= 11; day++ {
		p.day(p.home, day)
		p.day(p.far, day)
		p.home.restart(t)
		p.far.restart(t)
		p.hand(p.told()...)
	}
	if got := p.known(); got != "10 Mar: 6" {
		t.Errorf("the sum is known as %s", got)
	}
	for _, r := range p.home.store.Refused {
		t.Errorf("refused %s: %s", r.Reason, r.Detail)
	}
}
