package main

import (
	"encoding/json"
	"errors"
	"fmt"
	"io/fs"
	"maps"
	"math/rand/v2"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"syscall"
	"testing"

	"github.com/google/go-cmp/cmp"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/rehearse/ordeal"
)

// together is what several partitions hold, but for what depends on how many
// there are: copies of acts and set-ups, and positions.
func together(parts ...*outcome) *outcome {
	all := &outcome{}
	for _, o := range parts {
		all.Account = all.Account.Add(o.Account)
		all.Slots = append(all.Slots, o.Slots...)
		all.Records = append(all.Records, o.Records...)
		for _, r := range o.Refused {
			r.Position, r.Index = 0, 0
			if r.Reason == monitor.BeyondHorizon || r.Reason == monitor.Stray {
				r.Detail = "" // it names the header's time, and the partition
			}
			all.Refused = append(all.Refused, r)
		}
	}
	all.Slots = merged(nil, all.Slots)
	slices.Sort(all.Records)
	slices.SortFunc(all.Refused, func(a, b monitor.Refusal) int { return cmpText(fmt.Sprint(a), fmt.Sprint(b)) })
	all.Account.Acts, all.Account.ActsRefused, all.Account.Settings = 0, 0, 0
	return all
}

func allStored(t *testing.T, setup *config.Setup) *outcome {
	t.Helper()
	var parts []*outcome
	for n := range setup.Partitions {
		parts = append(parts, stored(t, setup, n))
	}
	return together(parts...)
}

// TestDivideOrdeal carries plans with all that may go wrong through several
// numbers of partitions. Every alert's record stays as it was to the byte, every
// slot, and every refusal. Where the two sites come into one partition, the set-up
// stays the same: a new one would be in force for both when it was for the first.
func TestDivideOrdeal(t *testing.T) {
	t.Run("apart", func(t *testing.T) { divideOrdeal(t, 2, 4, 6) })
	t.Run("together", func(t *testing.T) { divideOrdeal(t, 0, 3, 5) })
}

func divideOrdeal(t *testing.T, settings int, numbers ...int) {
	t.Helper()
	seed := *ordealSeed
	if seed == 0 {
		seed = rand.Uint64()
	}
	t.Logf("seed %d", seed)
	plan, err := ordeal.Generate(seed, ordeal.Options{Days: 90, Settings: settings})
	if err != nil {
		t.Fatal(err)
	}
	folder := filepath.Join(t.TempDir(), "data")
	path := filepath.Join(filepath.Dir(folder), "tailbell.toml")
	write := func(text []byte) *config.Setup {
		t.Helper()
		if err := os.WriteFile(path, fmt.Appendf(nil, "folder = %q\n%s", folder, text), 0o600); err != nil {
			t.Fatal(err)
		}
		setup, err := config.Load(path)
		if err != nil {
			t.Fatal(err)
		}
		return setup
	}
	setup := write(plan.Setups[0])
	b, err := bus.Open(t.Context(), setup, bus.WithoutListener())
	if err != nil {
		t.Fatal(err)
	}
	var batch []bus.Outgoing
	for _, m := range plan.Messages {
		switch m.Kind {
		case ordeal.Setting:
			for p := range 2 {
				batch = append(batch, bus.Outgoing{Partition: p, Kind: bus.Setting, Data: plan.Setups[m.Setup]})
			}
		case ordeal.Tick: // there are none in this plan
		case ordeal.Act:
			batch = append(batch, bus.Outgoing{Partition: m.Partition, Kind: bus.Act, Data: m.Data})
		case ordeal.Observations:
			batch = append(batch, bus.Outgoing{Partition: m.Partition, Data: m.Data})
		}
	}
	// What came to the wrong partition is refused there, and stays refused.
	batch = append(batch, bus.Outgoing{Partition: 1, Data: fmt.Appendf(nil, `{"series":%q,"at":"2025-01-02T00:00:00Z","events":1}`, ordeal.Sites[0]+"/ward-1/fall")})
	// Both stand at one time in the end, as a feed leaves them.
	for p := range 2 {
		batch = append(batch, bus.Outgoing{Partition: p, Kind: bus.Tick, Header: map[string][]string{wire.TimeHeader: {"2025-05-01T00:00:00Z"}}})
	}
	if _, err := b.PublishBatch(t.Context(), batch); err != nil {
		t.Fatal(err)
	}
	want := together(undisturbed(t, 0, everything(t, b, 0)), undisturbed(t, 1, everything(t, b, 1)))
	if len(want.Records) < 5 || len(want.Refused) < 5 || want.Account.RefusedBy["stray"] != 1 {
		t.Fatalf("there is too little to compare: %d records, %d refusals", len(want.Records), len(want.Refused))
	}
	if err := b.Close(); err != nil {
		t.Fatal(err)
	}
	for _, into := range numbers {
		code, out, complaint := run(t, "partitions", "divide", "--into", fmt.Sprint(into), "--config", path)
		if code != 0 || !strings.Contains(out, "balance") {
			t.Fatalf("into %d: exit code %d\n%s%s", into, code, out, complaint)
		}
		setup = write(config.WithPartitions(plan.Setups[settings], into))
		compareOutcomes(t, fmt.Sprintf("into %d", into), want, allStored(t, setup))
	}
}

// TestDivide grows a deployment at work: outlets are told nothing twice, and the
// daemon goes on.
func TestDivide(t *testing.T) {
	setup := edited(t, wardSetup(t), "two.toml", `series = ["quillmere-east/*/fall"]`, `series = ["quillmere-*/*/fall"]`)
	s := newService(t, setup)
	s.start()
	for ago := 25; ago > 3; ago-- {
		s.publish(day(1, ago, 2), day(2, ago, ago%2), `{"broken"`, strings.Replace(day(1, ago, ago%3), "east", "west", 1))
	}
	s.reaches(s.publish(day(3, 20, 0)))
	_, alerts, _ := run(t, "alert", "list", "--json", "--config", setup)
	var rang []struct{ ID string }
	if err := json.Unmarshal([]byte(alerts), &rang); err != nil || len(rang) == 0 {
		t.Fatalf("%v: nothing rang: %s", err, alerts)
	}
	s.says(0, nil, "alert", "acknowledge", rang[0].ID, "--by", "Ann Example")
	s.says(1, []string{"in use"}, "partitions", "divide", "--into", "3")
	s.stop(syscall.SIGTERM)
	before := s.stdout.String()
	_, alerts, _ = run(t, "alert", "list", "--all", "--json", "--config", setup)

	s.says(2, []string{"--into is missing"}, "partitions", "divide")
	s.says(0, []string{"1 partition into 3", "equal to the byte", "partitions = 3"}, "partitions", "divide", "--into", "3")
	s.says(0, []string{"has 3 partitions already"}, "partitions", "divide", "--into", "3")
	if code, complaint := refusesToRun(t, setup); code != 1 || !strings.Contains(complaint, "partitions") {
		t.Errorf("the old set-up after the division: exit code %d, %s", code, complaint)
	}
	three := edited(t, setup, "three.toml", `folder = "data"`, "folder = \"data\"\npartitions = 3")
	s.path = three
	s.start()
	_, after, _ := run(t, "alert", "list", "--all", "--json", "--config", three)
	var old, now []map[string]any
	if err := errors.Join(json.Unmarshal([]byte(alerts), &old), json.Unmarshal([]byte(after), &now)); err != nil {
		t.Fatal(err)
	}
	byID := func(a, b map[string]any) int { return cmpText(fmt.Sprint(a["id"]), fmt.Sprint(b["id"])) }
	slices.SortFunc(old, byID)
	slices.SortFunc(now, byID)
	if diff := cmp.Diff(old, now); diff != "" {
		t.Errorf("alerts (-before +after):\n%s", diff)
	}
	if said := strings.TrimPrefix(s.stdout.String(), before); said != "" {
		t.Errorf("told again:\n%s", said)
	}
	// Acts and observations reach the new partitions.
	s.says(0, nil, "alert", "note", rang[0].ID, "--by", "Ann Example", "--why", "seen")
	status, _ := s.status()
	for _, p := range status.Partitions {
		if p.History || len(p.Outlets) != 2 {
			t.Errorf("partition %d: %+v", p.Number, p)
		}
	}
	s.stop(syscall.SIGTERM)
}

// TestDivideBreaksOff stops a division at every stage: it goes on, or is given
// up.
func TestDivideBreaksOff(t *testing.T) {
	path := wardSetup(t)
	setup, err := config.Load(path)
	if err != nil {
		t.Fatal(err)
	}
	b, err := bus.Open(t.Context(), setup, bus.ToDivide(), bus.WithoutListener())
	if err != nil {
		t.Fatal(err)
	}
	announce := []bus.Outgoing{{Kind: bus.Setting, Data: setup.Text}, {Data: []byte(day(1, 9, 1))}, {Data: []byte(day(2, 9, 1))}}
	if _, err := b.PublishBatch(t.Context(), announce); err != nil {
		t.Fatal(err)
	}
	if _, err := b.Divide(t.Context(), 2); err != nil { // it has only begun
		t.Fatal(err)
	}
	if err := b.Close(); err != nil {
		t.Fatal(err)
	}
	if code, complaint := refusesToRun(t, path); code != 1 || !strings.Contains(complaint, "--into 2") {
		t.Errorf("exit code %d, %s", code, complaint)
	}
	says(t, 1, []string{"into 2 partitions"}, "partitions", "divide", "--into", "3", "--config", path)
	says(t, 0, []string{"as it was"}, "partitions", "divide", "--give-up", "--config", path)
	says(t, 0, []string{"No division"}, "partitions", "divide", "--give-up", "--config", path)
	if _, err := os.Stat(filepath.Join(setup.Folder, "division-1")); !errors.Is(err, fs.ErrNotExist) {
		t.Errorf("something is left: %v", err)
	}
	says(t, 0, []string{"2 elements with 2 events balance"}, "partitions", "divide", "--into", "2", "--config", path)

	// The stream is divided, but the stores were not moved yet.
	place := placeOf(setup, 1)
	if err := place.make(); err != nil {
		t.Fatal(err)
	}
	if err := os.Rename(storePath(setup, 1), place.draft(1)); err != nil {
		t.Fatal(err)
	}
	says(t, 0, []string{"partitions = 2"}, "partitions", "divide", "--into", "2", "--config", path)
	if _, err := os.Stat(storePath(setup, 1)); err != nil {
		t.Error(err)
	}
}

// TestDivideShared divides the stream of processes that share partitions: none of
// the stores is in one place, and whoever owns a new partition next tells nothing
// twice.
func TestDivideShared(t *testing.T) {
	c := newCluster(t, 2, true)
	defer func() {
		if t.Failed() {
			for i, s := range c.services {
				t.Logf("process %d:\n%s", i, s.log)
			}
		}
	}()
	for _, s := range c.services {
		s.start()
	}
	c.look()
	c.evenly(2)
	c.feed(0, 20)
	c.services[0].await("steps", func() bool { return c.steps() >= 20 })
	says(t, 1, []string{"a daemon runs"}, "partitions", "divide", "--into", "12", "--config", edited(t, c.services[0].path, "other.toml", `"data"`, `"elsewhere"`))
	for _, s := range c.services {
		s.stop(syscall.SIGTERM)
	}
	says(t, 0, []string{"8 partitions into 16", "Alerts: 20 before, 20 after; 20 equal to the byte"}, "partitions", "divide", "--into", "16", "--config", c.services[0].path)
	for _, s := range c.services {
		text := strings.Replace(string(readFile(t, s.path)), "partitions = 8", "partitions = 16", 1)
		if err := os.WriteFile(s.path, []byte(text), 0o600); err != nil {
			t.Fatal(err)
		}
	}
	// The one without the new stores comes first.
	c.services[1].start()
	c.services[1].await("16 partitions", func() bool {
		owners := c.owners()
		return len(owners) == 1 && slices.Max(slices.Collect(maps.Values(owners))) == 16
	})
	c.services[0].start()
	c.services[0].await("even shares", func() bool {
		owners := slices.Collect(maps.Values(c.owners()))
		return len(owners) == 2 && owners[0] == 8 && owners[1] == 8
	})
	c.feed(20, 20)
	c.services[0].await("steps", func() bool { return c.steps() >= 40 })
	for _, s := range c.services {
		s.stop(syscall.SIGTERM)
	}
	keys := map[string]int{}
	for _, list := range c.alerts() {
		for _, p := range list {
			if !p.mark {
				keys[p.key]++
			}
		}
	}
	if n := c.steps(); n != 40 || len(keys) != 40 {
		t.Errorf("%d steps on the bus with %d keys, want 40", n, len(keys))
	}
	shown := 0
	for _, s := range c.services {
		shown += strings.Count(s.stdout.String(), "\n")
	}
	if shown != 40 {
		t.Errorf("%d steps on the terminals, want 40", shown)
	}
}
