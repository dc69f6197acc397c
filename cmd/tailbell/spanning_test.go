package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"syscall"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"github.com/rs/zerolog"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/store"
)

// spanningSetup has series that are judged together wherever they lie: falls by
// their peers, slips and trips by an allowance for all of them, trips with sums.
const spanningSetup = `name = "quillmere"
folder = "data"
partitions = %d
%s
[[indicator]]
name = "fall"
noun = "falls"
series = ["quillmere-*/*/fall"]
sums = ["{site}/*/fall", "*/*/fall"]
unit = "bed-days"
every = "1d"
zone = "Europe/Berlin"
settle = "1d"
horizon = "30d"
windows = ["7d", "28d"]
p_limit = 0.02
quiet = 3
[indicator.baseline]
kind = "peers"
span = "28d"
refresh = "1w"
[[indicator]]
name = "slip"
noun = "slips"
series = ["quillmere-*/*/slip"]
unit = "bed-days"
every = "1d"
zone = "Europe/Berlin"
settle = "1d"
horizon = "30d"
windows = ["7d", "28d"]
allowance = "60 in 1y"
allowance_for = "indicator"
quiet = 3
[indicator.baseline]
kind = "known"
rate = 0.003
[[indicator]]
name = "trip"
noun = "trips"
series = ["quillmere-*/*/trip"]
sums = ["*/*/trip"]
unit = "bed-days"
every = "1d"
zone = "Europe/Berlin"
settle = "1d"
horizon = "30d"
windows = ["7d"]
allowance = "60 in 1y"
allowance_for = "indicator"
quiet = 3
[indicator.baseline]
kind = "known"
rate = 0.003
`

const historyMode = "[time]\nmode = \"history\""

// spanningHistory writes three months of falls, slips and trips.
func spanningHistory(t *testing.T, first time.Time) string {
	t.Helper()
	falls, err := os.ReadFile(gatheredHistoryFrom(t, first))
	if err != nil {
		t.Fatal(err)
	}
	var text strings.Builder
	for line := range strings.Lines(string(falls)) {
		for _, kind := range []string{"fall", "slip", "trip"} {
			text.WriteString(strings.NewReplacer(`/fall"`, "/"+kind+`"`, `"id":"`, `"id":"`+kind+"-").Replace(line))
		}
	}
	path := filepath.Join(t.TempDir(), "all.ndjson")
	if err := os.WriteFile(path, []byte(text.String()), 0o600); err != nil {
		t.Fatal(err)
	}
	return path
}

// spanning writes the set-up with so many partitions, and reads it.
func spanning(t *testing.T, partitions int, mode string) (string, *config.Setup) {
	t.Helper()
	path := filepath.Join(t.TempDir(), "tailbell.toml")
	if err := os.WriteFile(path, fmt.Appendf(nil, spanningSetup, partitions, mode), 0o600); err != nil {
		t.Fatal(err)
	}
	setup, err := config.Load(path)
	if err != nil {
		t.Fatal(err)
	}
	return path, setup
}

func feedFile(t *testing.T, path, history string) {
	t.Helper()
	if code, _, stderr := run(t, "feed", "--config", path, history); code != 0 {
		t.Fatalf("feed: exit code %d\n%s", code, stderr)
	}
}

// alertsOf are the records of all alerts, by series and id.
func alertsOf(t *testing.T, d *daemon) map[string]string {
	t.Helper()
	alerts := map[string]string{}
	for _, p := range d.parts.all() {
		rows, err := p.store.Alerts(store.AlertFilter{}, 0, 1<<20)
		if err != nil {
			t.Fatal(err)
		}
		for _, row := range rows {
			alerts[row.Record.Series+" "+row.Record.ID] = plainRecord(t, &row.Record)
		}
	}
	return alerts
}

// sameAlerts compares what partitions found with what one did.
func sameAlerts(t *testing.T, what string, one, several map[string]string) {
	t.Helper()
	if diff := cmp.Diff(one, several); diff != "" {
		t.Errorf("%s: -one partition +several:\n%.6000s", what, diff)
	}
}

// runSpanning runs the daemon, feeds the file meanwhile if there is one, and
// returns the alerts when all is read and told.
func runSpanning(t *testing.T, path string, setup *config.Setup, file string) (alerts map[string]string) {
	t.Helper()
	d, err := openDaemon(t.Context(), setup, daemonOptions{log: zerolog.Nop(), maxBatch: 50})
	if err != nil {
		t.Fatal(err)
	}
	ctx, stop := context.WithCancel(t.Context())
	ended := make(chan error, 1)
	go func() { ended <- d.run(ctx) }()
	if file != "" {
		feedFile(t, path, file)
	}
	patience, cancel := context.WithTimeout(ctx, 2*time.Minute)
	defer cancel()
	if !setup.History {
		awaitLive(t, patience, d)
	}
	awaitGathered(t, patience, d)
	alerts = alertsOf(t, d)
	stop()
	if err := <-ended; err != nil {
		t.Fatal(err)
	}
	if err := d.close(); err != nil {
		t.Fatal(err)
	}
	return alerts
}

// awaitLive waits until every partition is live.
func awaitLive(t *testing.T, ctx context.Context, d *daemon) {
	t.Helper()
	for _, p := range d.parts.all() {
		for history := true; history; {
			if err := p.do(ctx, func(e *monitor.Engine) { history = e.InHistory() }); err != nil {
				t.Fatal(err)
			}
			select {
			case <-time.After(5 * time.Millisecond):
			case <-ctx.Done():
				t.Fatal(ctx.Err())
			}
		}
	}
}

// TestSpanning runs the daemon with one partition and with four over a history that
// was fed before it started, one that is fed while it runs, and one with which it
// goes live: the alerts are the same to the byte.
func TestSpanning(t *testing.T) {
	for mode, text := range map[string]string{"history": historyMode, "live": ""} {
		t.Run(mode, func(t *testing.T) {
			first := time.Date(2025, 3, 1, 0, 0, 0, 0, time.UTC)
			if mode == "live" {
				first = now().UTC().AddDate(0, 0, -120) // some days pass since the last report
			}
			history := spanningHistory(t, first)
			path, setup := spanning(t, 1, text)
			feedFile(t, path, history)
			one := runSpanning(t, path, setup, "")
			for _, kind := range []string{"/fall", "/slip", "/trip"} {
				if n := len(slices.DeleteFunc(slices.Collect(seriesOf(one)), func(s string) bool { return !strings.Contains(s, kind) })); n == 0 {
					t.Errorf("no alert of %s", kind)
				}
			}
			path, setup = spanning(t, 4, text)
			feedFile(t, path, history)
			sameAlerts(t, "fed before", one, runSpanning(t, path, setup, ""))
			if mode == "history" {
				path, setup = spanning(t, 4, text)
				sameAlerts(t, "fed meanwhile", one, runSpanning(t, path, setup, history))
			}
		})
	}
}

// TestSpanningIsDivided divides a deployment whose series are judged together, once
// in history time and once when it has gone live: no record changes by it.
func TestSpanningIsDivided(t *testing.T) {
	for mode, text := range map[string]string{"history": historyMode, "live": ""} {
		t.Run(mode, func(t *testing.T) {
			first := time.Date(2025, 3, 1, 0, 0, 0, 0, time.UTC)
			if mode == "live" {
				first = now().UTC().AddDate(0, 0, -120)
			}
			path, setup := spanning(t, 2, text)
			feedFile(t, path, spanningHistory(t, first))
			before := runSpanning(t, path, setup, "")
			out := says(t, 0, []string{"2 partitions into 4", fmt.Sprintf("Alerts: %d before, %[1]d after; %[1]d equal to the byte", len(before))},
				"partitions", "divide", "--into", "4", "--config", path)
			t.Log(out)
			file, err := os.ReadFile(path)
			if err != nil {
				t.Fatal(err)
			}
			if err := os.WriteFile(path, []byte(strings.Replace(string(file), "partitions = 2", "partitions = 4", 1)), 0o600); err != nil {
				t.Fatal(err)
			}
			if setup, err = config.Load(path); err != nil {
				t.Fatal(err)
			}
			sameAlerts(t, "divided", before, runSpanning(t, path, setup, ""))
		})
	}
}

// liveStream makes a stream of so many partitions that were live for three months,
// as a division leaves it: each report was stored when it became known, and every
// partition heard a tick each morning.
func liveStream(t *testing.T, partitions int, history string) (string, *config.Setup) {
	t.Helper()
	path, old := spanning(t, partitions+1, "")
	b, err := openToDivide(t.Context(), old)
	if err != nil {
		t.Fatal(err)
	}
	d, err := b.Divide(t.Context(), partitions)
	if err == nil {
		err = d.Begin(t.Context())
	}
	if err != nil {
		t.Fatal(err)
	}
	file := fmt.Appendf(nil, spanningSetup, partitions, "")
	if err := os.WriteFile(path, file, 0o600); err != nil {
		t.Fatal(err)
	}
	setup, err := config.Load(path)
	if err != nil {
		t.Fatal(err)
	}
	var msgs []bus.Outgoing
	var times []time.Time
	add := func(at time.Time, out bus.Outgoing) { msgs, times = append(msgs, out), append(times, at) }
	all := func(at time.Time, out bus.Outgoing) {
		for out.Partition = range partitions {
			add(at, out)
		}
	}
	text, err := os.ReadFile(history)
	if err != nil {
		t.Fatal(err)
	}
	var morning time.Time
	for line := range strings.Lines(string(text)) {
		var o struct {
			Series   string    `json:"series"`
			Reported time.Time `json:"reported"`
		}
		if err := json.Unmarshal([]byte(line), &o); err != nil {
			t.Fatal(err)
		}
		if morning.IsZero() {
			morning = o.Reported.Truncate(24 * time.Hour)
			all(morning, bus.Outgoing{Kind: bus.Setting, Data: file})
			all(morning, bus.Outgoing{Kind: bus.Tick, Header: map[string][]string{wire.LiveHeader: {"1"}}})
		}
		for ; !morning.After(o.Reported); morning = morning.Add(24 * time.Hour) {
			all(morning, bus.Outgoing{Kind: bus.Tick})
		}
		if o.Reported.Before(now()) {
			add(o.Reported, bus.Outgoing{Partition: setup.PartitionOf(o.Series), Data: []byte(line)})
		}
	}
	all(now().Add(-time.Minute), bus.Outgoing{Kind: bus.Tick})
	if err := errors.Join(d.Carry(t.Context(), msgs, times), d.Finish(t.Context()), b.Close()); err != nil {
		t.Fatal(err)
	}
	return path, setup
}

// TestLiveTimeIsDivided divides what was read in live time, where nobody waited since
// everybody had told in time: those who read it again wait, and find the same.
func TestLiveTimeIsDivided(t *testing.T) {
	history := spanningHistory(t, now().UTC().AddDate(0, 0, -94))
	path, setup := liveStream(t, 1, history)
	one := runSpanning(t, path, setup, "")
	if len(one) == 0 {
		t.Error("no alert")
	}
	path, setup = liveStream(t, 4, history)
	sameAlerts(t, "live", one, runSpanning(t, path, setup, ""))
	says(t, 0, []string{"4 partitions into 8", fmt.Sprintf("Alerts: %d before, %[1]d after; %[1]d equal to the byte", len(one))},
		"partitions", "divide", "--into", "8", "--config", path)
}

// TestReplayOfPartitions replays the stream of four partitions, with an act of which
// each has a copy: it finds what a replay of the files does.
func TestReplayOfPartitions(t *testing.T) {
	path, _ := spanning(t, 4, historyMode)
	history := spanningHistory(t, time.Date(2025, 3, 1, 0, 0, 0, 0, time.UTC))
	text, err := os.ReadFile(history)
	if err != nil {
		t.Fatal(err)
	}
	const act = `{"act":"reset","series":"quillmere-*/*/slip","from":"2025-04-20T00:00:00+02:00","by":"T. Averin","why":"looked into","at":"2025-04-21T10:00:00+02:00"}` + "\n"
	var lines strings.Builder
	acted := false
	for line := range strings.Lines(string(text)) {
		if !acted && strings.Contains(line, `"reported":"2025-04-22`) {
			lines.WriteString(act)
			acted = true
		}
		lines.WriteString(line)
	}
	if err := os.WriteFile(history, []byte(lines.String()), 0o600); err != nil {
		t.Fatal(err)
	}
	feedFile(t, path, history)
	want := notices(t, says(t, 0, nil, "replay", "--json", "--config", path, history))
	_, out, complaint := run(t, "replay", "--json", "--config", path, "--stream")
	if !strings.Contains(complaint, "1 act, 0 refused") {
		t.Errorf("the act was not taken once:\n%s", complaint)
	}
	compareNotices(t, "the stream", want, notices(t, out))
}

// TestKilledWhileWaiting kills the daemon again and again while its partitions wait
// for each other over a history, and finds what one that nobody disturbed does.
func TestKilledWhileWaiting(t *testing.T) {
	history := spanningHistory(t, time.Date(2025, 3, 1, 0, 0, 0, 0, time.UTC))
	path, setup := spanning(t, 1, historyMode)
	feedFile(t, path, history)
	one := runSpanning(t, path, setup, "")
	path, setup = spanning(t, 4, historyMode)
	feedFile(t, path, history)
	s := newService(t, path)
	waited, last := 0, uint64(0)
	for range 4 {
		s.start()
		s.await("progress", func() bool {
			code, out, _ := run(t, "status", "--json", "--config", path)
			var r statusReply
			if code != 0 || json.Unmarshal([]byte(out), &r) != nil {
				return false
			}
			sum := uint64(0)
			for i := range r.Partitions {
				sum += r.Partitions[i].Position
				waited += len(r.Partitions[i].WaitsFor)
			}
			defer func() { last = max(last, sum) }()
			return sum > last+20
		})
		s.stop(syscall.SIGKILL)
	}
	if waited == 0 {
		t.Error("no partition was seen to wait")
	}
	sameAlerts(t, "killed", one, runSpanning(t, path, setup, ""))
}
