package feed

import (
	"bytes"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/bus/bustest"
	"tailbell/ingest/history"
	"tailbell/ingest/wire"
	"tailbell/monitor"
)

const indicators = `
[[indicator]]
name = "fall"
series = ["*/*/fall"]
unit = "bed-days"
every = "1d"
zone = "Europe/Berlin"
windows = ["7d"]
p_limit = 0.001
[indicator.baseline]
kind = "known"
rate = 0.01

[[indicator]]
name = "restart"
series = ["*/restart"]
unit = "hours"
every = "1h"
zone = "Europe/Berlin"
ids = "none"
windows = ["1d"]
p_limit = 0.001
[indicator.baseline]
kind = "known"
rate = 0.01
`

// fed is a set-up with so many partitions and a history of so many days of
// three wards, read from a file.
func fed(t *testing.T, partitions, days int) (*config.Setup, *history.History) {
	t.Helper()
	text := fmt.Sprintf("name = \"feed\"\nfolder = \"x\"\npartitions = %d\n%s", partitions, indicators)
	setup, err := config.Parse([]byte(text), "set-up")
	if err != nil {
		t.Fatal(err)
	}
	setup.Folder = filepath.Join(t.TempDir(), "data")
	var rows strings.Builder
	rows.WriteString("series,date,events,exposure\n")
	for d := range days {
		for _, site := range []string{"east", "north", "quay"} {
			fmt.Fprintf(&rows, "%s/ward/fall,2026-01-%02d,%d,20.5\n", site, d+1, d%2)
		}
	}
	file := filepath.Join(t.TempDir(), "falls.csv")
	if err := os.WriteFile(file, []byte(rows.String()), 0o600); err != nil {
		t.Fatal(err)
	}
	zone, err := config.LoadZone("Europe/Berlin")
	if err != nil {
		t.Fatal(err)
	}
	h, err := history.Read(t.Context(), []string{file}, history.Options{Zone: zone})
	if err != nil {
		t.Fatal(err)
	}
	return setup, h
}

// TestPublish checks that every entry arrives once, in order, in its
// partition, together with those of the same time, and with its time.
func TestPublish(t *testing.T) {
	for _, partitions := range []int{1, 4} {
		t.Run(fmt.Sprint(partitions), func(t *testing.T) {
			setup, h := fed(t, partitions, 20)
			b := bustest.Open(t, setup)
			var progress []int
			n, err := Publish(t.Context(), b, setup, h.Entries, func(n int) { progress = append(progress, n) })
			if err != nil || n != len(h.Entries) || progress[len(progress)-1] != n {
				t.Fatalf("published %d of %d: %v (progress %v)", n, len(h.Entries), err, progress)
			}
			var got int
			for p := range partitions {
				got += arrived(t, b, setup, p)
			}
			if got != len(h.Entries) {
				t.Errorf("%d of %d entries arrived", got, len(h.Entries))
			}
		})
	}
}

// arrived reads a partition to its end and returns how many observations it
// holds.
func arrived(t *testing.T, b *bus.Bus, setup *config.Setup, partition int) int {
	t.Helper()
	end, err := b.EndOf(t.Context(), partition)
	if err != nil || end == 0 {
		return 0
	}
	source, err := b.Source(t.Context(), partition, 0)
	if err != nil {
		t.Fatal(err)
	}
	decoder := wire.NewDecoder(wire.Limits{})
	count, last := 0, monitor.Beginning
	for source.Position() < end {
		raws, err := source.Next(t.Context(), nil, 1000, 1<<20)
		if err != nil {
			t.Fatal(err)
		}
		for _, raw := range raws {
			m := decoder.Decode(raw)
			if !m.HasTime || m.Time < last {
				t.Errorf("position %d has the time %v after %v", m.Position, m.Time, last)
			}
			last = m.Time
			for _, it := range m.Items {
				if it.Reason != "" || config.PartitionOf(it.Observation.Series, setup.KeyParts, setup.Partitions) != partition {
					t.Errorf("%s in partition %d: %s %s", it.Observation.Series, partition, it.Reason, it.Detail)
				}
				if it.Observation.HistoryTime() != m.Time {
					t.Errorf("%s travels with %v but is of %v", it.Observation.Series, m.Time, it.Observation.HistoryTime())
				}
			}
			count += len(m.Items)
		}
	}
	if err := source.Close(); err != nil {
		t.Error(err)
	}
	return count
}

// TestPacking checks that a message holds entries of one time only, and no
// more than its limits.
func TestPacking(t *testing.T) {
	setup, h := fed(t, 1, 3)
	p := packer{setup: setup, limit: 4 * len(h.Entries[0].JSON) / 2}
	for i := range h.Entries {
		if err := p.add(&h.Entries[i]); err != nil {
			t.Fatal(err)
		}
	}
	for i, m := range p.messages {
		if len(m.Data) > p.limit || bytes.Count(m.Data, []byte("\n"))+1 != p.held[i] {
			t.Errorf("message %d holds %d entries in %d bytes", i, p.held[i], len(m.Data))
		}
	}
	if len(p.messages) != 9 { // pairs don't fit with their line feed
		t.Errorf("%d messages", len(p.messages))
	}
}

// TestCheck checks that indicators which can't tell a repeat are named.
func TestCheck(t *testing.T) {
	setup, h := fed(t, 1, 1)
	if names := Check(setup, h.Entries); names != nil {
		t.Errorf("named %v", names)
	}
	o := monitor.Observation{Series: "ferrybill/restart", Start: 1, End: 3_600_000_001, HasEvents: true}
	entry := history.Entry{JSON: wire.EncodeObservation(nil, &o)}
	if names := Check(setup, append(h.Entries, entry)); len(names) != 1 || names[0] != "restart" {
		t.Errorf("named %v", names)
	}
}
