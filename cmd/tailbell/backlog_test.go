package main

import (
	"fmt"
	"path/filepath"
	"testing"
	"time"

	"github.com/rs/zerolog"

	"tailbell/config"
	"tailbell/ingest/bus"
)

// TestBacklog lets a daemon find many messages at its start: a million in a long
// run. What it holds in memory does not follow from how many there are, and the
// account is that of all.
func TestBacklog(t *testing.T) {
	n := 30_000
	if *ordealKills > 0 {
		n = 1_000_000
	}
	setup, err := config.Parse(fmt.Appendf(nil, `name = "ferrybill"
folder = %q
[time]
mode = "history"
[[indicator]]
name = "failed-request"
series = ["*/failed-request"]
unit = "requests"
every = "1h"
events = "counted"
ids = "none"
horizon = "7d"
windows = ["6h"]
p_limit = 1e-7
[indicator.baseline]
kind = "known"
rate = 0.001
`, filepath.Join(t.TempDir(), "data")), "t.toml")
	if err != nil {
		t.Fatal(err)
	}
	d, err := openDaemon(t.Context(), setup, daemonOptions{log: zerolog.Nop()})
	if err != nil {
		t.Fatal(err)
	}
	x := &troubled{daemon: d, t: t}
	began := time.Now()
	start := time.Date(2026, 3, 2, 0, 0, 0, 0, time.UTC)
	batch := make([]bus.Outgoing, 0, 1000)
	for i := range n {
		at := start.Add(time.Duration(i/500) * time.Hour)
		batch = append(batch, bus.Outgoing{Data: fmt.Appendf(nil, `{"series":"service-%d/failed-request","start":%q,"end":%q,"events":1,"exposure":1000}`,
			i%500, at.Format(time.RFC3339), at.Add(time.Hour).Format(time.RFC3339))})
		if len(batch) == cap(batch) || i == n-1 {
			if _, err := d.bus.PublishBatch(t.Context(), batch); err != nil {
				t.Fatal(err)
			}
			batch = batch[:0]
		}
	}
	published := time.Since(began)
	began = time.Now()
	x.begin()
	for last := uint64(0); ; {
		s := x.await("further", func(s *statusReply) bool { return s.Partitions[0].Position > last })
		if last = s.Partitions[0].Position; last < s.Partitions[0].End {
			continue
		}
		if a := s.Partitions[0].Account; a.Elements != int64(n) || a.Counted != int64(n) {
			t.Errorf("%+v", a)
		}
		break
	}
	t.Logf("%d messages: published in %.1f s, read in %.1f s", n, published.Seconds(), time.Since(began).Seconds())
}
