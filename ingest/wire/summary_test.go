package wire

import (
	"bytes"
	"fmt"
	"testing"
	"time"

	"tailbell/config"
	"tailbell/monitor"
)

// telling is a set-up under which partitions tell each other all that they can.
func telling(tb testing.TB) *config.Setup {
	tb.Helper()
	setup, err := config.Parse([]byte(`
name = "x"
folder = "x"
partitions = 2
[[indicator]]
name = "fall"
series = ["*/*/fall"]
sums = ["*/*/fall"]
unit = "bed-days"
every = "1d"
windows = ["7d"]
allowance = "1 in 1y"
allowance_for = "indicator"
[indicator.baseline]
kind = "peers"
span = "14d"
strata = { by = "weekday", factors = [1, 1, 1, 1, 1, 0.5, 0.5] }
`), "set-up")
	if err != nil {
		tb.Fatal(err)
	}
	return setup
}

// summaries are what a partition of two tells another, as it is published.
func summaries(tb testing.TB) [][]byte {
	tb.Helper()
	setup := telling(tb)
	teller := 1 - setup.HomeOf("fall")
	site := "a"
	for config.PartitionOf(site, 1, 2) != teller {
		site += "a"
	}
	e := monitor.New(monitor.Partition{Number: teller, Of: 2, KeyParts: 1})
	e.Apply(&monitor.Message{Position: 1, Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
	d := NewDecoder(Limits{})
	var all [][]byte
	for n, text := range []string{
		`{"series":"` + site + `/w/fall","start":"2026-03-02T00:00:00Z","end":"2026-03-03T00:00:00Z","events":1,"exposure":22,"id":"7","reported":"2026-03-03T01:00:00Z"}`,
		`{"series":"` + site + `/w/fall","start":"2026-03-08T00:00:00Z","end":"2026-03-09T00:00:00Z","events":0,"exposure":21}`,
	} {
		m := d.Decode(Raw{Position: uint64(n + 2), Subject: "x.in.0.obs", Data: []byte(text)})
		e.Apply(&m)
		for _, out := range e.Drain().Summaries {
			all = append(all, out.Data)
		}
	}
	if len(all) == 0 {
		tb.Fatal("nothing is told")
	}
	return all
}

func TestSummariesAreDecoded(t *testing.T) {
	for _, data := range summaries(t) {
		if m := NewDecoder(Limits{MessageBytes: 1}).Decode(Raw{Subject: "x.in.0.sum", Data: data}); m.Kind != monitor.SummaryMessage || m.Summary.Indicator != "fall" {
			t.Errorf("%x: %+v", data, m)
		}
		for n := range data {
			if m := NewDecoder(Limits{}).Decode(Raw{Subject: "x.in.0.sum", Data: data[:n]}); m.Kind != monitor.Rejected || m.Items[0].Reason != monitor.BadSummary {
				t.Errorf("cut off after %d bytes: kind %d", n, m.Kind)
			}
		}
	}
}

// takeIn lets an engine that waits for summaries take one, and live on with it.
func takeIn(t *testing.T, setup *config.Setup, partition int, m monitor.Message) {
	t.Helper()
	e := monitor.New(monitor.Partition{Number: partition, Of: 2, KeyParts: 1})
	site := "a"
	for config.PartitionOf(site, 1, 2) != partition {
		site += "a"
	}
	d := NewDecoder(Limits{})
	data := fmt.Appendf(nil, `{"series":"%s/w/fall","start":"2026-03-05T00:00:00Z","end":"2026-03-06T00:00:00Z","events":1,"exposure":22,"reported":"2026-03-06T01:00:00Z"}`, site)
	seen := d.Decode(Raw{Position: 2, Subject: "x.in.0.obs", Data: data})
	e.Apply(&monitor.Message{Position: 1, Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
	e.Apply(&seen)
	m.Position = 3
	e.Apply(&m)
	for n := range 6 {
		at := time.Date(2026, 3, 7+n, 6, 0, 0, 0, time.UTC)
		e.Apply(&monitor.Message{Position: uint64(4 + n), Kind: monitor.Live, Stored: monitor.InstantOf(at)})
	}
	if !e.Account().Balanced() {
		t.Fatal("the account does not balance")
	}
	e.Drain()
}

// FuzzSummary checks that whatever comes is either refused with all its bytes, or
// understood in a way that says the same when it is taken by an engine again.
func FuzzSummary(f *testing.F) {
	for _, data := range summaries(f) {
		f.Add(data)
	}
	setup := telling(f)
	f.Fuzz(func(t *testing.T, data []byte) {
		before := bytes.Clone(data)
		m := NewDecoder(Limits{}).Decode(Raw{Position: 1, Subject: "x.in.0.sum", Data: data})
		if !bytes.Equal(before, data) {
			t.Fatal("the decoder changed its input")
		}
		switch m.Kind {
		case monitor.Rejected:
			if m.Items[0].Reason != monitor.BadSummary || !bytes.Equal(m.Items[0].Raw, data) {
				t.Fatalf("rejected as %+v", m.Items[0])
			}
		case monitor.SummaryMessage:
			for p := range 2 { // it may be refused there, but nothing breaks
				e := monitor.New(monitor.Partition{Number: p, Of: 2, KeyParts: 1})
				e.Apply(&m)
				if data[0] == 2 { // what is counted
					takeIn(t, setup, p, m)
				}
				if !e.Account().Balanced() {
					t.Fatal("the account does not balance")
				}
				e.Drain()
			}
		case monitor.Observations, monitor.ActMessage, monitor.SettingMessage, monitor.Tick, monitor.Live:
			t.Fatalf("kind %d", m.Kind)
		}
	})
}
