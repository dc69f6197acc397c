package main

import (
	"encoding/json"
	"slices"
	"strings"
	"syscall"
	"testing"
	"time"

	"tailbell/config"
	"tailbell/monitor"
)

// listed returns the partitions as listed.
func listed(t *testing.T, setup string) []partitionRow {
	t.Helper()
	code, out, complaint := run(t, "partitions", "list", "--json", "--config", setup)
	var rows []partitionRow
	if err := json.Unmarshal([]byte(out), &rows); code != 0 || err != nil {
		t.Fatalf("exit code %d, %v: %s%s", code, err, out, complaint)
	}
	return rows
}

// TestPartitionsOfOne lists the partitions of a daemon that owns them all, and
// those of none that runs.
func TestPartitionsOfOne(t *testing.T) {
	s := newService(t, wardSetup(t))
	s.says(1, []string{"nothing has run yet"}, "partitions", "list")
	s.start()
	for ago := 25; ago > 3; ago-- {
		s.publish(day(1, ago, 2), day(2, ago, 0))
	}
	end := s.publish(day(3, 20, 0))
	s.reaches(end)
	check := func(owner string) {
		t.Helper()
		rows := listed(t, s.path)
		if len(rows) != 1 || rows[0].Owner != owner || rows[0].Position < end || rows[0].Behind != 0 || rows[0].Series != 3 || rows[0].OpenAlerts != 1 || rows[0].Epoch != 1 {
			t.Errorf("%+v", rows)
		}
	}
	check(ownerAlone)
	s.says(0, []string{"PARTITION  OWNER       EPOCH", "0          the daemon  1"}, "partitions", "list")
	s.stop(syscall.SIGTERM)
	check(ownerAtRest)
}

// TestPartitionsOfNobody lists a partition that has no owner.
func TestPartitionsOfNobody(t *testing.T) {
	rows := partitionRows(&config.Setup{Partitions: 2}, &statusReply{
		Partitions: []partStatus{{Number: 1, Owner: "a-1", Epoch: 3, Position: 1200, End: 2400}},
		Troubles:   []trouble{{Kind: troubleUnowned, Partition: 0, Text: "nobody owns it at present"}},
	})
	var out strings.Builder
	if err := writePartitions(&out, rows, time.Time{}); err != nil {
		t.Fatal(err)
	}
	want := `PARTITION  OWNER   EPOCH  POSITION  BEHIND  SERIES  ALERTS  LAST COPY
0          nobody  -      -         -       -       -       -
1          a-1     3      1,200     1,200   0       0       -
partition 0: nobody owns it at present
`
	if out.String() != want {
		t.Errorf("got\n%s", out.String())
	}
}

// TestPartitionsOfSeveral lists those that processes share: who owns them, the
// copies, and those that nobody owns.
func TestPartitionsOfSeveral(t *testing.T) {
	c := newCluster(t, 2, true)
	for _, s := range c.services {
		s.start()
	}
	c.look()
	c.evenly(2)
	c.feed(0, 20)
	var rows []partitionRow
	c.services[0].await("copies of all", func() bool {
		rows = listed(t, c.services[1].path)
		for _, r := range rows {
			if r.Copy == nil {
				return false
			}
		}
		return true
	})
	owners, series := map[string]int{}, 0
	for n, r := range rows {
		owners[r.Owner]++
		series += r.Series
		if r.Number != n || r.Behind != 0 || r.Epoch == 0 || r.Copy.Bytes == 0 || r.Copy.Position > r.Position {
			t.Errorf("%+v", r)
		}
	}
	if len(owners) != 2 || len(rows) != 8 || series != 20 {
		t.Errorf("%v own %d partitions of %d series", owners, len(rows), series)
	}
	c.services[0].says(0, []string{" ago"}, "partitions", "list")
	c.services[0].stop(syscall.SIGKILL)
	c.evenly(1)
	c.services[1].await("one owner", func() bool {
		for _, r := range listed(t, c.services[1].path) {
			if r.Owner == "" {
				return false
			}
		}
		return true
	})
	c.services[1].stop(syscall.SIGTERM)
}

// TestStatusHasRoom tells some of very many conditions, and every silence.
func TestStatusHasRoom(t *testing.T) {
	all := slices.Concat(slices.Repeat([]monitor.Condition{{Kind: monitor.WithheldLooks}}, 500), slices.Repeat([]monitor.Condition{{Kind: monitor.Silent}}, 40))
	s := partStatus{Number: 1}
	s.addConditions(all, mostConditions/16)
	if len(s.Conditions) != 62+40 || s.MoreConditions != 500-62 {
		t.Errorf("%d told, %d more", len(s.Conditions), s.MoreConditions)
	}
	var out strings.Builder
	if err := writePartition(&out, "quillmere", &s, zones{}); err != nil || !strings.Contains(out.String(), "and 438 conditions more") {
		t.Errorf("%v: %s", err, out.String())
	}
}
