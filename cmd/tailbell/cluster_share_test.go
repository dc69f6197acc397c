package main

import (
	"encoding/json"
	"fmt"
	"maps"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"syscall"
	"testing"
	"time"

	"tailbell/ingest/bus"
	"tailbell/ingest/claim"
	"tailbell/ingest/copies"
	"tailbell/monitor/life"
)

// TestShare lets three processes share eight partitions: one is killed, one is
// stopped past its claim and wakes, one is added, and one ends cleanly.
func TestShare(t *testing.T) {
	c := newCluster(t, 4, true)
	for _, s := range c.services[:3] {
		s.start()
	}
	c.look()
	c.evenly(3)
	rung := 0
	ring := func(by *service) {
		t.Helper()
		c.feed(rung, 20)
		rung += 20
		by.await("steps", func() bool { return c.steps() >= rung })
	}
	ring(c.services[0])

	killed := time.Now()
	c.services[0].stop(syscall.SIGKILL)
	c.evenly(2)
	t.Logf("taken over %v after the kill", time.Since(killed).Round(time.Millisecond))
	ring(c.services[1])

	sleeper := c.services[1]
	if err := sleeper.cmd.Process.Signal(syscall.SIGSTOP); err != nil {
		t.Fatal(err)
	}
	c.evenly(1)
	ring(c.services[2])
	if err := sleeper.cmd.Process.Signal(syscall.SIGCONT); err != nil {
		t.Fatal(err)
	}
	c.evenly(2)
	ring(sleeper)

	c.services[3].start()
	c.evenly(3)
	ring(c.services[3])
	sleeper.stop(syscall.SIGTERM)
	c.evenly(2)
	c.services[2].stop(syscall.SIGTERM)
	c.evenly(1)
	ring(c.services[3])
	c.services[3].stop(syscall.SIGTERM)
	if owners := c.owners(); len(owners) > 0 {
		t.Errorf("after the end: %v", owners)
	}
	c.check()
	if n := c.steps(); n != rung {
		t.Errorf("%d steps, want %d", n, rung)
	}
	told := map[string]int{} // by the terminals of all processes
	for _, s := range c.services {
		for line := range strings.Lines(s.stdout.String()) {
			var n life.Notice
			if err := json.Unmarshal([]byte(line), &n); err != nil {
				t.Fatalf("%v: %s", err, line)
			}
			told[n.Key]++
		}
	}
	repeats := 0
	for _, n := range told {
		repeats += n - 1
	}
	t.Logf("the terminals told %d of %d steps, %d of them again", len(told), rung, repeats)
	if len(told) != rung || repeats > rung/2 {
		t.Error("steps were not told, or most of them again")
	}
}

// TestCommandsOfACluster asks one process, which ever answers, for what all of
// them have.
func TestCommandsOfACluster(t *testing.T) {
	c := newCluster(t, 3, true)
	for _, s := range c.services {
		s.start()
	}
	c.look()
	c.evenly(3)
	c.feed(0, 40)
	c.services[0].await("steps", func() bool { return c.steps() >= 40 })
	config := c.services[1].path
	status, ok := c.services[2].status()
	if !ok || len(status.Partitions) != 8 || len(status.Troubles) > 0 {
		t.Errorf("%d partitions, %+v", len(status.Partitions), status.Troubles)
	}
	elements := int64(0)
	for _, p := range status.Partitions {
		elements += p.Account.Elements
	}
	if elements != 400 {
		t.Errorf("%d elements", elements)
	}
	list := says(t, 0, nil, "alert", "list", "--config", config)
	lines := strings.Split(strings.TrimSpace(list), "\n")
	if len(lines) < 41 {
		t.Fatalf("%d lines:\n%s", len(lines), list)
	}
	for _, i := range []int{1, 7, 20, 39} {
		id := strings.Fields(lines[i])[0]
		says(t, 0, []string{"Noted on alert " + id}, "alert", "note", id, "--by", "B. Ostrander", "--why", "line set", "--config", config)
		says(t, 0, []string{"line set"}, "alert", "show", id, "--config", config)
	}
	says(t, 1, []string{"no alert"}, "alert", "show", "nothing", "--config", config)
	if got := strings.Count(says(t, 0, nil, "alert", "export", "--config", config), "line set"); got != 4 {
		t.Errorf("%d notes in the export", got)
	}
	if got := strings.Count(says(t, 0, nil, "series", "list", "--config", config), "/ward-1/fall"); got != 40 {
		t.Errorf("%d series", got)
	}
	says(t, 0, nil, "outlet", "list", "--config", config)
	says(t, 0, nil, "outlet", "try", "bus", "--config", config)
	says(t, 1, []string{"no outlet"}, "outlet", "drop", "nothing", "--config", config)
	says(t, 0, []string{"No intake is held"}, "clock", "accept", "--config", config)
	says(t, 0, []string{"nothing changes"}, "config", "diff", config)
}

// copied waits until the copies on the bus reach as far as the stream, and returns
// the newest of each partition.
func (c *cluster) copied() (newest []copies.Copy) {
	c.t.Helper()
	shelf, err := c.bus.Copies(c.t.Context())
	if err != nil {
		c.t.Fatal(err)
	}
	for n := range 8 {
		end, err := c.bus.EndOf(c.t.Context(), n)
		if err != nil {
			c.t.Fatal(err)
		}
		c.services[0].await("a copy", func() bool {
			list, err := copies.List(c.t.Context(), shelf, n)
			if err != nil || len(list) == 0 || list[0].Position < end {
				return false
			}
			newest = append(newest, list[0])
			return true
		})
	}
	return newest
}

// TestTakeOverFromCopies kills the only process after the stream has been
// trimmed, and starts another one without a store: it goes on from the copies, and
// where the newest one is damaged from the one before.
func TestTakeOverFromCopies(t *testing.T) {
	c := newCluster(t, 2, true)
	c.services[0].start()
	c.look()
	c.evenly(1)
	c.feed(0, 20)
	first := c.copied()
	c.feed(20, 20)
	second := c.copied()
	for n := range second {
		if second[n].Position <= first[n].Position {
			t.Fatalf("partition %d: copies at %d and %d", n, first[n].Position, second[n].Position)
		}
	}
	damaged := 0 // that whose last message lies furthest back
	for n := range second {
		if second[n].Position < second[damaged].Position {
			damaged = n
		}
	}
	file := filepath.Join(t.TempDir(), "other")
	if err := os.WriteFile(file, []byte("this is no store"), 0o600); err != nil {
		t.Fatal(err)
	}
	shelf, err := c.bus.Copies(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	bad := second[damaged]
	bad.Position++ // it may be as long as it likes
	if err := copies.Save(t.Context(), shelf, file, &bad); err != nil {
		t.Fatal(err)
	}
	through := first[0].Position
	for _, one := range first {
		through = min(through, one.Position)
	}
	if err := c.bus.Trim(t.Context(), through); err != nil {
		t.Fatal(err)
	}
	c.services[0].stop(syscall.SIGKILL)
	s := c.services[1]
	s.start()
	s.await("the owner", func() bool {
		owners := c.owners()
		return len(owners) == 1 && slices.Max(slices.Collect(maps.Values(owners))) == 8 && strings.Count(s.log.String(), `"message":"live"`) == 8
	})
	if got := strings.Count(s.log.String(), "going on from a copy"); got != 8 {
		t.Errorf("%d of 8 partitions go on from a copy:\n%s", got, s.log)
	}
	if got := strings.Count(s.log.String(), "of no use"); got != 1 {
		t.Errorf("%d copies were refused, want one:\n%s", got, s.log)
	}
	c.feed(40, 20)
	s.await("steps", func() bool { return c.steps() >= 60 })
	c.check()
	elements := int64(0)
	status, _ := s.status()
	for _, p := range status.Partitions {
		elements += p.Account.Elements
	}
	if n := c.steps(); n != 60 || elements != 600 {
		t.Errorf("%d steps, %d elements", n, elements)
	}
	s.stop(syscall.SIGTERM)
}

// TestRollOut brings a new set-up into force, one process after the other, and
// trims the stream.
func TestRollOut(t *testing.T) {
	c := newCluster(t, 2, true)
	c.services[0].start()
	c.services[1].start()
	c.look()
	c.evenly(2)
	c.feed(0, 20)
	changed := c.services[1]
	changed.stop(syscall.SIGTERM)
	changed.path = edited(t, changed.path, "tailbell.toml", "quiet = 3", "quiet = 5")
	changed.start()
	c.evenly(1)
	changed.await("that it waits", func() bool {
		_, text := changed.ready()
		return strings.Contains(text, "takes no part") && strings.Contains(text, "comes into force when")
	})
	c.feed(20, 20)
	c.services[0].stop(syscall.SIGTERM)
	c.evenly(1)
	c.feed(40, 20)
	changed.await("steps", func() bool { return c.steps() >= 60 })
	status, ok := changed.status()
	if !ok || len(status.Partitions) != 8 || status.Partitions[3].Version != 2 || len(status.Troubles) > 0 {
		t.Errorf("%+v", status)
	}

	to := filepath.Join(t.TempDir(), "kept")
	says(t, 0, nil, "store", "copy", "--config", changed.path, changed.setup().Folder, to)
	says(t, 0, []string{"removed up to position"}, "stream", "trim", "--config", changed.path, to)
	id, err := c.bus.Identity(t.Context())
	if err != nil || id.First < 300 {
		t.Errorf("the stream begins at %d, %v", id.First, err)
	}
	shelf, err := c.bus.Copies(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	for n := range 8 {
		list, err := copies.List(t.Context(), shelf, n)
		if err != nil || len(list) == 0 || list[len(list)-1].Position+100 < id.First {
			t.Errorf("partition %d: %+v, %v", n, list, err)
		}
	}
	changed.stop(syscall.SIGKILL)
	if err := os.RemoveAll(changed.setup().Folder); err != nil {
		t.Fatal(err)
	}
	changed.start()
	c.evenly(1)
	c.feed(60, 20)
	changed.await("steps", func() bool { return c.steps() >= 80 })
	c.check()
}

// TestLostTailIsNoSecret empties the stream behind the back of an owner that is
// killed: a process without its store does not go on as if nothing were missing.
func TestLostTailIsNoSecret(t *testing.T) {
	c := newCluster(t, 2, true)
	c.services[0].start()
	c.look()
	c.evenly(1)
	c.feed(0, 20)
	c.copied()
	c.feed(20, 20)
	id, err := c.bus.Identity(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	c.services[0].await("the position in the claims", func() bool {
		rows, err := claim.Look(t.Context(), c.bucket)
		if err != nil {
			t.Fatal(err)
		}
		return slices.ContainsFunc(rows, func(r claim.Row) bool { return r.Position == id.Last })
	})
	c.services[0].stop(syscall.SIGKILL)
	rows, err := claim.Look(t.Context(), c.bucket)
	if err != nil {
		t.Fatal(err)
	}
	for _, r := range rows { // as if more had been counted than the stream holds
		r.Position += 100
		data, err := json.Marshal(r.Holding)
		if err != nil {
			t.Fatal(err)
		}
		entries, err := c.bucket.All(t.Context())
		if err != nil {
			t.Fatal(err)
		}
		for _, e := range entries {
			if e.Key == fmt.Sprint("p.", r.Partition) {
				if o := c.bucket.PutAll(t.Context(), []bus.Put{{Key: e.Key, Value: data, Revision: e.Revision}})[0]; o.Err != nil {
					t.Fatal(o.Err)
				}
			}
		}
	}
	code, _, stderr := run(t, "run", "--config", c.services[1].path, "--health", "off")
	if code != 1 || !strings.Contains(stderr, "the owner before had counted up to") {
		t.Errorf("another process: %d\n%s", code, stderr)
	}
	c.services[0].start() // the last owner has the store, which shows that nothing is lost
	c.evenly(1)
	c.feed(40, 20)
	c.services[0].await("steps", func() bool { return c.steps() >= 60 })
	c.check()
	says(t, 1, []string{"processes share the partitions"}, "store", "rebuild", "--config", c.services[0].path, c.services[0].setup().Folder)
}

// TestAlone checks that a second process is refused where processes do not share,
// while the first lives, and goes on at once after it.
func TestAlone(t *testing.T) {
	c := newCluster(t, 2, false)
	c.services[0].start()
	c.look()
	code, _, stderr := run(t, "run", "--config", c.services[1].path, "--health", "off")
	if code != 1 || !strings.Contains(stderr, "owns partition 0 and renews its claim") {
		t.Errorf("a second process: %d\n%s", code, stderr)
	}
	c.feed(0, 20)
	c.services[0].await("steps", func() bool { return c.steps() >= 20 })
	c.services[0].stop(syscall.SIGKILL)
	began := time.Now()
	c.services[0].start() // its own folder: nobody has to wait
	t.Logf("again after %v", time.Since(began).Round(time.Millisecond))
	c.services[0].stop(syscall.SIGTERM)
	c.services[1].start() // from the beginning of the stream
	c.services[1].await("the owner", func() bool { return slices.Max(slices.Collect(maps.Values(c.owners()))) == 8 })
	c.feed(20, 20)
	c.services[1].await("steps", func() bool { return c.steps() >= 40 })
	c.services[1].stop(syscall.SIGTERM)
}
