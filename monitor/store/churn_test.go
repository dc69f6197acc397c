package store_test

import (
	"flag"
	"fmt"
	"os"
	"path/filepath"
	"runtime"
	"strings"
	"testing"
	"time"

	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/life"
	"tailbell/monitor/store"
)

var (
	churnNames = flag.Int("churn.names", 5000, "how many series come and go each day")
	churnDays  = flag.Int("churn.days", 9, "for how many days")
)

const churnSetup = `
name = "churn"
folder = "x"
[limits]
max_series = 2000000
max_ids = 4000000
memory = "1TiB"
archive = "ARCHIVE"
[[indicator]]
name = "restart"
series = ["ferrybill/*/restart"]
unit = "host-hours"
every = "1h"
events = "each"
exposure = "clock"
clock = { size = 1, per = "1h" }
settle = "5m"
horizon = "6h"
retire = "1d"
ids = IDS
windows = ["6h"]
p_limit = 0.00000001
[indicator.baseline]
kind = "known"
rate = 0.01
`

// churned is what a day leaves.
type churned struct {
	living, numbers       int
	heap, state           int64
	archive, file         int64
	restart               time.Duration
	retired, returned, in int64
}

// Series come and go, each for a day, as hosts and releases do: what is kept of
// them in memory and as state does not grow from one day to the next.
func TestSeriesComeAndGo(t *testing.T) {
	for name, how := range map[string][2]string{"none": {`"none"`, "all"}, "kept": {`"kept"`, "all"}, "two days": {`"none"`, "2d"}} {
		t.Run(name, func(t *testing.T) {
			days := churn(t, how[0], how[1])
			half, last := days[len(days)/2], days[len(days)-1]
			if last.living > half.living*21/20 || last.numbers > half.numbers*21/20 {
				t.Errorf("after %d days %d series live and %d numbers are taken; after %d days it was %d and %d",
					len(days)/2+1, half.living, half.numbers, len(days), last.living, last.numbers)
			}
			if most := 5 * *churnNames; last.numbers > most {
				t.Errorf("%d numbers are taken, more than %d", last.numbers, most)
			}
			// What is archived stays, as it must, unless the set-up says for how long;
			// what a start reads does not grow.
			if a, b := half.archive, last.archive; how[1] != "all" && (b > a*21/20 || last.file > half.file*5/4) || how[1] == "all" && b < a*3/2 {
				t.Errorf("the archive went from %d to %d bytes, the file from %d to %d", a, b, half.file, last.file)
			}
			if last.state > half.state*5/4 {
				t.Errorf("the state grew from %d to %d bytes", half.state, last.state)
			}
			if last.retired < int64(*churnNames**churnDays/2) || last.returned == 0 {
				t.Errorf("only %d series retired, %d returned", last.retired, last.returned)
			}
		})
	}
}

func churn(t *testing.T, ids, archive string) (days []churned) {
	t.Helper()
	setup, err := config.Parse([]byte(strings.NewReplacer("IDS", ids, "ARCHIVE", archive).Replace(churnSetup)), "test")
	if err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(t.TempDir(), "p0.db")
	s, err := store.Create(path, store.Identity{Deployment: "churn", Partitions: 1, KeyParts: 1}, store.Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer func() {
		if err := s.Close(); err != nil {
			t.Error(err)
		}
	}()
	c := &coming{t: t, store: s, engine: monitor.New(monitor.Partition{Of: 1, KeyParts: 1}), ids: ids == `"kept"`}
	c.apply(monitor.Message{Kind: monitor.Live, Stored: c.at(0, 0)})
	c.apply(monitor.Message{Kind: monitor.SettingMessage, Stored: c.at(0, 0), Setting: monitor.Setting{Setup: setup}})
	for day := range *churnDays {
		c.day(day)
		days = append(days, c.measure())
		d := days[day]
		t.Logf("day %d: %d living, %d numbers, %d retired, %d returned; heap %d MB, state %d kB, archive %d kB, file %d MB, restart %v",
			day+1, d.living, d.numbers, d.retired, d.returned, d.heap>>20, d.state>>10, d.archive>>10, d.file>>20, d.restart.Round(time.Millisecond))
	}
	return days
}

type coming struct {
	t        *testing.T
	store    *store.Store
	engine   *monitor.Engine
	position uint64
	ids      bool
}

func (c *coming) at(day int, part time.Duration) monitor.Instant {
	return monitor.InstantOf(time.Date(2026, 3, 2+day, 0, 0, 0, 0, time.UTC).Add(part))
}

func (c *coming) apply(m monitor.Message) {
	c.position++
	m.Position = c.position
	c.engine.Apply(&m)
}

func (c *coming) commit() {
	if err := c.store.Commit(c.engine.Drain(), store.Mark{}); err != nil {
		c.t.Fatal(err)
	}
}

// day plays one: each name of the day reports three times, some hours apart; one of
// a hundred has the name of one two days before.
func (c *coming) day(day int) {
	const batch = 500
	for round := range 3 {
		for first := 0; first < *churnNames; first += batch {
			part := time.Duration(round)*7*time.Hour + 6*time.Hour/time.Duration(*churnNames)*time.Duration(first)
			at := c.at(day, part)
			m := monitor.Message{Kind: monitor.Observations, Stored: at}
			for i := first; i < min(first+batch, *churnNames); i++ {
				of, host := day, i
				if i%100 == 0 {
					of, host = max(0, day-2), i+1
				}
				o := monitor.Observation{Series: fmt.Sprintf("ferrybill/host-%d-%d/restart", of, host), Start: at, End: at, Instant: true, HasEvents: true}
				if i%50 == 0 {
					o.Events = 1
				}
				if c.ids {
					o.ID = fmt.Sprintf("%d-%d-%d", day, i, round)
				}
				m.Items = append(m.Items, monitor.Item{Observation: o})
			}
			c.apply(m)
			c.commit()
		}
	}
	c.apply(monitor.Message{Kind: monitor.Tick, Stored: c.at(day+1, -1)})
	c.commit()
}

func (c *coming) measure() churned {
	var mem runtime.MemStats
	runtime.GC()
	runtime.ReadMemStats(&mem)
	a := c.engine.Account()
	if !a.Balanced() || a.Refused > 0 {
		c.t.Fatalf("the account: %+v", a)
	}
	d := churned{living: c.engine.SeriesCount(), heap: int64(mem.HeapAlloc), retired: a.Retired, returned: a.Returned, in: a.Elements}
	if err := c.store.Archived(func(a monitor.ArchivedSlot) error { d.archive += int64(len(a.Data)) + 12; return nil }); err != nil {
		c.t.Fatal(err)
	}
	info, err := os.Stat(c.store.Path())
	if err != nil {
		c.t.Fatal(err)
	}
	d.file = info.Size()
	begin := time.Now()
	snap, err := c.store.Snapshot()
	if err != nil {
		c.t.Fatal(err)
	}
	d.numbers = len(snap.Series)
	for i := range snap.Series {
		d.state += int64(len(snap.Series[i].State))
		for _, p := range snap.Series[i].Patches {
			d.state += int64(len(p))
		}
	}
	for i := range snap.IDs {
		d.state += int64(len(snap.IDs[i].Value))
	}
	e, err := monitor.Restore(monitor.Partition{Of: 1, KeyParts: 1}, &snap, func(id string) (life.Record, error) {
		row, err := c.store.Alert(id)
		return row.Record, err
	})
	if err != nil {
		c.t.Fatal(err)
	}
	d.restart = time.Since(begin)
	if again := e.Account(); !a.Balanced() || again.Retired != a.Retired || e.SeriesCount() != d.living {
		c.t.Fatalf("restored: %+v instead of %+v", again, a)
	}
	c.engine = e // it goes on from what was stored
	return d
}
