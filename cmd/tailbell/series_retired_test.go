package main

import (
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"
)

const counterSetup = `name = "ferrybill"
folder = "data"
[time]
mode = "history"
[limits]
max_series = 100
[[indicator]]
name = "failure"
noun = "failures"
series = ["ferrybill/*/failure"]
unit = "requests"
every = "1h"
events = "counted"
exposure = "reported"
settle = "10m"
horizon = "6h"
retire = "1d"
windows = ["2h"]
p_limit = 0.001
quiet = 3
[indicator.baseline]
kind = "known"
rate = 0.001
`

// readAgain writes readings of a counter, one every twenty minutes from an hour on, as
// rows of a table.
func readAgain(b *strings.Builder, series string, from time.Time, n, failing int) {
	total, requests := 500, 1_000_000
	for i := range n {
		if i >= failing {
			total += 4
		}
		requests += 1000
		fmt.Fprintf(b, "%s,%s,%d,%d\n", series, from.Add(time.Duration(i)*20*time.Minute).Format(time.RFC3339), total, requests)
	}
}

// Counters are fed as they were read; a host of which nothing is heard any more ends,
// is listed, also after a start, and comes back.
func TestCountersAndSeriesThatEnd(t *testing.T) {
	path := filepath.Join(t.TempDir(), "tailbell.toml")
	if err := os.WriteFile(path, []byte(counterSetup), 0o600); err != nil {
		t.Fatal(err)
	}
	table := func(write func(b *strings.Builder)) string {
		var b strings.Builder
		b.WriteString("series,at,total,exposure_total\n")
		write(&b)
		file := filepath.Join(t.TempDir(), "readings.csv")
		if err := os.WriteFile(file, []byte(b.String()), 0o600); err != nil {
			t.Fatal(err)
		}
		return file
	}
	begin := time.Date(2026, 3, 2, 10, 0, 0, 0, time.UTC)
	s := newService(t, path)
	s.start()
	first := table(func(b *strings.Builder) {
		readAgain(b, "ferrybill/host-1/failure", begin, 200, 1000)
		readAgain(b, "ferrybill/host-2/failure", begin, 12, 4)
	})
	s.says(0, []string{"212 observations"}, "feed", first)
	s.await("the readings", func() bool {
		r, ok := s.status()
		return ok && r.Partitions[0].Position == r.Partitions[0].End
	})
	alerts := s.says(0, []string{"ferrybill/host-2/failure"}, "alert", "list")
	if strings.Contains(alerts, "host-1") {
		t.Errorf("the quiet host rang:\n%s", alerts)
	}
	id, _, _ := strings.Cut(strings.TrimSpace(strings.Split(alerts, "\n")[1]), " ")
	t.Log("\n" + s.says(0, []string{"readings of counters from which counting begins"}, "status"))
	s.says(0, []string{"No series match"}, "series", "list", "--retired")
	s.says(0, nil, "alert", "close", id, "--by", "B. Tester", "--why", "switched off")
	second := table(func(b *strings.Builder) { readAgain(b, "ferrybill/host-1/failure", begin.Add(70*time.Hour), 20, 1000) })
	s.says(0, nil, "feed", second)
	ended := func() bool {
		r, ok := s.status()
		return ok && r.Partitions[0].Account.Retired == 1 && r.Partitions[0].Series == 1
	}
	s.await("the end of the host", ended)
	t.Log("\n" + s.says(0, []string{"ferrybill/host-2/failure", "ended 2026-03-"}, "series", "list", "--retired"))
	s.stop(os.Interrupt)
	s.start()
	s.await("the same after a start", ended)
	s.says(0, []string{"1 series monitored; 1 have ended"}, "status")
	s.says(0, []string{`"condition": "ended"`}, "series", "list", "--retired", "ferrybill/host-2/*", "--json")
	third := table(func(b *strings.Builder) { readAgain(b, "ferrybill/host-2/failure", begin.Add(78*time.Hour), 20, 4) })
	s.says(0, nil, "feed", third)
	s.await("the host back", func() bool {
		r, ok := s.status()
		return ok && r.Partitions[0].Account.Returned == 1 && r.Partitions[0].Position == r.Partitions[0].End
	})
	s.says(0, []string{"No series match"}, "series", "list", "--retired")
	again := s.says(0, []string{"ferrybill/host-2/failure"}, "alert", "list")
	if strings.Contains(again, id) {
		t.Errorf("the alert has the id of the old one:\n%s", again)
	}
	t.Log("\n" + again)
}
