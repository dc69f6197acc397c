package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"github.com/rs/zerolog"

	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/life"
	"tailbell/monitor/store"
)

const gatheredSetup = `name = "quillmere"
folder = "data"
partitions = %d
[time]
mode = "history"
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
p_limit = 0.01
quiet = 3
[indicator.baseline]
kind = "known"
rate = 0.003
`

// gatheredHistory writes three months of six sites, of which all have more falls
// in the second, with reports that come late and are corrected.
func gatheredHistory(t *testing.T) string {
	t.Helper()
	return gatheredHistoryFrom(t, time.Date(2025, 3, 1, 0, 0, 0, 0, time.UTC))
}

// gatheredHistoryFrom writes that from another day on.
func gatheredHistoryFrom(t *testing.T, first time.Time) string {
	t.Helper()
	zone, err := time.LoadLocation("Europe/Berlin")
	if err != nil {
		t.Fatal(err)
	}
	type row struct {
		reported time.Time
		line     string
	}
	var rows []row
	begin := time.Date(first.Year(), first.Month(), first.Day(), 0, 0, 0, 0, zone)
	for day := range 92 {
		for n, site := range []string{"east", "west", "north", "south", "harbour", "hill"} {
			for ward := range 2 {
				events := 0
				if day >= 31 && day < 62 && (day+3*n+ward)%5 == 0 {
					events = 1
				}
				start := begin.AddDate(0, 0, day)
				say := func(revision, events, late int) {
					reported := start.AddDate(0, 0, 1).Add(time.Duration(late*24+n) * time.Hour)
					rows = append(rows, row{reported, fmt.Sprintf(
						`{"id":"%s-%d-%d","revision":%d,"series":"quillmere-%s/ward-%d/fall","start":"%s","end":"%s","events":%d,"exposure":20,"reported":"%s"}`,
						site, ward, day, revision, site, ward, start.Format(time.RFC3339), start.AddDate(0, 0, 1).Format(time.RFC3339), events, reported.Format(time.RFC3339))})
				}
				late := 0
				if (day+n)%17 == 0 {
					late = 3
				}
				say(0, events, late)
				if events > 0 && (day+ward)%11 == 0 {
					say(1, 0, 6)
				}
			}
		}
	}
	slices.SortStableFunc(rows, func(a, b row) int { return a.reported.Compare(b.reported) })
	var text strings.Builder
	for _, r := range rows {
		text.WriteString(r.line + "\n")
	}
	path := filepath.Join(t.TempDir(), "falls.ndjson")
	if err := os.WriteFile(path, []byte(text.String()), 0o600); err != nil {
		t.Fatal(err)
	}
	return path
}

// TestGatheredSums runs the daemon with one partition and with four, stopped in
// between, over the same history: the alerts of all series and sums are the same,
// and those that a replay of either set-up finds.
func TestGatheredSums(t *testing.T) {
	history := gatheredHistory(t)
	one := gatheredAlerts(t, 1, history)
	if n := len(slices.DeleteFunc(slices.Collect(seriesOf(one)), func(s string) bool { return !strings.HasPrefix(s, "*/*/fall") })); n == 0 {
		t.Error("the sum of all sites has no alert")
	}
	four := gatheredAlerts(t, 4, history)
	if diff := cmp.Diff(one, four); diff != "" {
		t.Errorf("-one partition +four:\n%s", diff)
	}
}

// TestGatheredSumsAreDivided divides a deployment with sums over all sites into
// three partitions, and those, which have not read everything yet, into two, in a
// division that breaks off twice: no alert is lost.
func TestGatheredSumsAreDivided(t *testing.T) {
	path := filepath.Join(t.TempDir(), "tailbell.toml")
	before := 1
	for _, into := range []int{3, 2} {
		if err := os.WriteFile(path, fmt.Appendf(nil, gatheredSetup, before), 0o600); err != nil {
			t.Fatal(err)
		}
		setup, err := config.Load(path)
		if err != nil {
			t.Fatal(err)
		}
		if before == 1 {
			if code, _, stderr := run(t, "feed", "--config", path, gatheredHistory(t)); code != 0 {
				t.Fatalf("feed: exit code %d\n%s", code, stderr)
			}
		}
		runGathered(t, setup, before == 1, func(*daemon) {})
		if before > 1 {
			breakOff(t, setup, into)
		}
		code, out, stderr := run(t, "partitions", "divide", "--into", fmt.Sprint(into), "--config", path)
		if code != 0 || !strings.Contains(out, "equal to the byte") {
			t.Fatalf("divide into %d: exit code %d\n%s%s", into, code, out, stderr)
		}
		t.Log(out)
		before = into
	}
}

// breakOff begins a division that ends when the stream has been closed to
// publishers, and goes on with it until the new stores are filled.
func breakOff(t *testing.T, setup *config.Setup, into int) {
	t.Helper()
	for _, filled := range []bool{false, true} {
		b, err := openToDivide(t.Context(), setup)
		if err != nil {
			t.Fatal(err)
		}
		next := *setup
		next.Partitions = into
		v := &division{bus: b, setup: setup, next: &next, options: divideOptions{progress: io.Discard}}
		if filled {
			if err := v.carry(t.Context()); err != nil {
				t.Fatal(err)
			}
			err = v.fill(t.Context())
		} else {
			_, err = b.Divide(t.Context(), into)
		}
		if err := errors.Join(err, v.close(), b.Close()); err != nil {
			t.Fatal(err)
		}
	}
}

func seriesOf(alerts map[string]string) func(func(string) bool) {
	return func(yield func(string) bool) {
		for series := range alerts {
			if !yield(series) {
				return
			}
		}
	}
}

var setupDigest = regexp.MustCompile(`"setup_digest": "[0-9a-f]+"`)

// gatheredAlerts feeds the history to a daemon, and returns the records of its
// alerts, by series and id.
func gatheredAlerts(t *testing.T, partitions int, history string) map[string]string {
	t.Helper()
	path := filepath.Join(t.TempDir(), "tailbell.toml")
	if err := os.WriteFile(path, fmt.Appendf(nil, gatheredSetup, partitions), 0o600); err != nil {
		t.Fatal(err)
	}
	setup, err := config.Load(path)
	if err != nil {
		t.Fatal(err)
	}
	if code, _, stderr := run(t, "feed", "--config", path, history); code != 0 {
		t.Fatalf("feed: exit code %d\n%s", code, stderr)
	}
	alerts := map[string]string{}
	for _, last := range []bool{false, true} { // stopped somewhere, then to the end
		runGathered(t, setup, last, func(d *daemon) {
			for _, p := range d.parts.all() {
				rows, err := p.store.Alerts(store.AlertFilter{}, 0, 1<<20)
				if err != nil {
					t.Fatal(err)
				}
				for _, row := range rows {
					alerts[row.Record.Series+" "+row.Record.ID] = plainRecord(t, &row.Record)
				}
			}
		})
	}
	compareReplay(t, path, history, alerts)
	return alerts
}

// runGathered runs the daemon until something was committed, or until all was
// gathered, and looks at it then.
func runGathered(t *testing.T, setup *config.Setup, all bool, look func(*daemon)) {
	t.Helper()
	d, err := openDaemon(t.Context(), setup, daemonOptions{log: zerolog.Nop(), maxBatch: 7})
	if err != nil {
		t.Fatal(err)
	}
	ctx, stop := context.WithCancel(t.Context())
	ended := make(chan error, 1)
	go func() { ended <- d.run(ctx) }()
	patience, cancel := context.WithTimeout(ctx, time.Minute)
	defer cancel()
	if all {
		awaitGathered(t, patience, d)
		look(d)
	} else if err := d.parts.get(0).reach(patience, 20); err != nil {
		t.Fatal(err)
	}
	stop()
	if err := <-ended; err != nil {
		t.Fatal(err)
	}
	if err := d.close(); err != nil {
		t.Fatal(err)
	}
}

// awaitGathered waits until every partition has read what there is, and has told
// all.
func awaitGathered(t *testing.T, ctx context.Context, d *daemon) {
	t.Helper()
	for last := uint64(0); ; {
		waiting, read := false, uint64(0)
		for _, p := range d.parts.all() {
			end, err := d.bus.EndOf(ctx, p.number)
			if err == nil {
				err = p.reach(ctx, end)
			}
			untold := uint64(0)
			read += end
			if err == nil {
				untold, err = p.store.Untold()
			}
			if err == nil {
				err = p.do(ctx, func(e *monitor.Engine) {
					waiting = waiting || untold > 0 || slices.ContainsFunc(e.Conditions(), func(c monitor.Condition) bool { return c.Kind == monitor.WaitsForPartition })
				})
			}
			if err != nil {
				t.Fatal(err)
			}
		}
		if !waiting && read == last { // nothing came while the others were asked
			return
		}
		last = read
		select {
		case <-time.After(5 * time.Millisecond):
		case <-ctx.Done():
			t.Fatal(ctx.Err())
		}
	}
}

// plainRecord is the record without the digest of the set-up, in which the number
// of partitions stands.
func plainRecord(t *testing.T, r *life.Record) string {
	t.Helper()
	data, err := json.MarshalIndent(r, "", " ")
	if err != nil {
		t.Fatal(err)
	}
	return setupDigest.ReplaceAllString(string(data), "")
}

// compareReplay compares the daemon's alerts with those of a replay.
func compareReplay(t *testing.T, path, history string, alerts map[string]string) {
	t.Helper()
	code, out, stderr := run(t, "replay", "--config", path, "--json", history)
	if code != 0 {
		t.Fatalf("replay: exit code %d\n%s", code, stderr)
	}
	replayed := map[string]bool{}
	for line := range strings.Lines(out) {
		var n life.Notice
		if err := json.Unmarshal([]byte(line), &n); err != nil || n.Record.ID == "" {
			continue
		}
		replayed[n.Record.Series+" "+n.Record.ID] = true
	}
	for key := range alerts {
		if !replayed[key] {
			t.Errorf("the replay does not find %s", key)
		}
	}
	if len(replayed) != len(alerts) {
		t.Errorf("the replay finds %d alerts, the daemon %d\n%.2000s", len(replayed), len(alerts), out)
	}
}
