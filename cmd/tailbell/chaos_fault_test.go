package main

import (
	"context"
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

	"tailbell/ingest/claim"
	"tailbell/monitor/life"
	"tailbell/monitor/rehearse/ordeal"
)

// undigested are records without the digest of the set-up, which in the plan has
// no bus.
func undigested(t *testing.T, alerts []life.Record) (list []string) {
	t.Helper()
	for i := range alerts {
		a := alerts[i]
		a.Steps = slices.Clone(a.Steps)
		a.Opening.SetupDigest, a.Worst.SetupDigest = "", ""
		for n := range a.Steps {
			if e := a.Steps[n].Evidence; e != nil {
				one := *e
				one.SetupDigest = ""
				a.Steps[n].Evidence = &one
			}
		}
		text, err := json.Marshal(&a)
		if err != nil {
			t.Fatal(err)
		}
		list = append(list, string(text))
	}
	slices.Sort(list)
	return list
}

// faults are what may be done to a run, by name.
func (x *chaos) faults() map[string]func() {
	all := map[string]func(){
		"node killed": x.killNode,
	}
	if len(x.workers) == 1 {
		all["process killed"] = func() { x.workers[0].kill(); x.moment(300); x.workers[0].start() }
		return all
	}
	all["process killed"] = x.killWorker
	all["process stopped"] = x.stopWorker
	all["process cut off"] = x.cutWorker
	all["process ended"] = x.endWorker
	all["all killed"] = x.killAll
	return all
}

// moment waits for so many milliseconds and up to as many more.
func (x *chaos) moment(ms int) { idle(time.Duration(ms+x.random.IntN(ms)) * time.Millisecond) }

func (x *chaos) killNode() {
	n := x.nodes[x.random.IntN(len(x.nodes))]
	n.kill()
	x.moment(1500)
	n.start()
	x.awaitBus()
	x.moment(1500)
}

// owned returns what each partition's claim says.
func (x *chaos) owned() map[int]claim.Row {
	x.t.Helper()
	all := map[int]claim.Row{}
	ctx, cancel := context.WithTimeout(x.t.Context(), time.Second)
	defer cancel()
	rows, err := claim.Look(ctx, x.board)
	if err != nil {
		return nil // while no node leads
	}
	for _, r := range rows {
		all[r.Partition] = r
	}
	return all
}

// nameOf is the name by which a process owns partitions.
func (x *chaos) nameOf(w *worker) string {
	x.t.Helper()
	name, err := os.ReadFile(filepath.Join(x.parsed(w).Folder, "member"))
	if err != nil {
		x.t.Fatal(err)
	}
	return strings.TrimSpace(string(name))
}

// takenOver waits until nothing is owned any more by the start of a process that
// was there, and its partitions have moved on: their new owners have committed
// something. It notes how long that took.
func (x *chaos) takenOver(what string, from time.Time, before map[int]claim.Row, w *worker) {
	x.t.Helper()
	mine := map[int]claim.Row{}
	for n, r := range before {
		if strings.HasPrefix(r.Owner, x.nameOf(w)+"-") {
			mine[n] = r
		}
	}
	owned, each := time.Duration(0), map[int]time.Duration{}
	x.await(what+": others own its partitions", func() bool {
		now := x.owned()
		taken, moved := 0, 0
		for n, was := range mine {
			if r := now[n]; r.Owner != "" && r.Epoch > was.Epoch {
				taken++
				if each[n] == 0 {
					each[n] = time.Since(from)
				}
				if r.Position > was.Position {
					moved++
				}
			}
		}
		if taken == len(mine) && owned == 0 {
			owned = time.Since(from)
		}
		return now != nil && taken == len(mine) && (moved == len(mine) || x.pub.left() == 0)
	})
	o := takeover{what: what, partitions: len(mine), owned: owned, noted: time.Since(from)}
	for _, c := range x.firstCommits() {
		if at, ok := each[c.Partition]; ok && c.Epoch > mine[c.Partition].Epoch {
			o.opening = max(o.opening, ms(c.Opening))
			o.reading = max(o.reading, ms(c.Since-c.Opening))
			o.stored = max(o.stored, at+ms(c.Since))
		}
	}
	x.takeovers = append(x.takeovers, o)
}

// takeover is how long it took until all partitions of a process were owned by
// others, these had committed something, and had noted that in their claims; and
// how long the slowest opened a store, copies included, and read on.
type takeover struct {
	what       string
	partitions int

	owned, stored, noted time.Duration
	opening, reading     time.Duration
}

func (o takeover) String() string {
	return fmt.Sprintf("%s: %d partitions owned after %v, stored after %v (opening %v and then reading %v at most), noted after %v", o.what, o.partitions,
		round(o.owned), round(o.stored), round(o.opening), round(o.reading), round(o.noted))
}

func round(d time.Duration) time.Duration { return d.Round(10 * time.Millisecond) }

func ms(n float64) time.Duration { return time.Duration(n * float64(time.Millisecond)) }

// firstCommit is what a process logs of the first commit of a partition that it
// has taken, in milliseconds.
type firstCommit struct {
	Message   string  `json:"message"`
	Partition int     `json:"partition"`
	Epoch     uint64  `json:"epoch"`
	Opening   float64 `json:"opening"`
	Since     float64 `json:"since_claim"`
}

// firstCommits reads them from the logs of all processes.
func (x *chaos) firstCommits() (all []firstCommit) {
	x.t.Helper()
	for _, w := range x.workers {
		text, err := os.ReadFile(w.stderr)
		if err != nil {
			x.t.Fatal(err)
		}
		for line := range strings.Lines(string(text)) {
			var c firstCommit
			if json.Unmarshal([]byte(line), &c) == nil && strings.HasPrefix(c.Message, "the first commit") {
				all = append(all, c)
			}
		}
	}
	return all
}

func (x *chaos) anyWorker() *worker { return x.workers[x.random.IntN(len(x.workers))] }

// killWorker kills a process, and starts it again when others have taken over.
func (x *chaos) killWorker() {
	w, before := x.anyWorker(), x.owned()
	from := time.Now()
	w.kill()
	x.takenOver("killed", from, before, w)
	w.start()
}

// stopWorker stops a process for longer than its claims hold, and lets it wake.
func (x *chaos) stopWorker() {
	w, before := x.anyWorker(), x.owned()
	from := time.Now()
	x.signal(w, syscall.SIGSTOP)
	x.takenOver("stopped", from, before, w)
	x.moment(300)
	x.signal(w, syscall.SIGCONT)
}

func (x *chaos) signal(w *worker, s os.Signal) {
	x.t.Helper()
	if err := w.cmd.Process.Signal(s); err != nil {
		x.t.Fatal(err)
	}
}

// cutWorker cuts a process off from every node, for longer than its claims hold.
func (x *chaos) cutWorker() {
	w, before := x.anyWorker(), x.owned()
	from := time.Now()
	x.cutOff(w)
	x.takenOver("cut off", from, before, w)
	x.moment(300)
	w.banned.Store(false)
}

// endWorker ends a process cleanly: it hands over.
func (x *chaos) endWorker() {
	w, before := x.anyWorker(), x.owned()
	from := time.Now()
	w.end(syscall.SIGTERM)
	x.takenOver("ended", from, before, w)
	w.start()
}

// killAll kills all processes at once.
func (x *chaos) killAll() {
	for _, w := range x.workers {
		x.signal(w, syscall.SIGKILL)
	}
	for _, w := range x.workers {
		w.kill()
		w.start()
	}
}

// evenly waits until every process owns its share.
func (x *chaos) evenly() {
	x.t.Helper()
	x.await("even shares", func() bool {
		owners := map[string]int{}
		for _, r := range x.owned() {
			if r.Owner != "" {
				owners[r.Owner]++
			}
		}
		sum, most := 0, 0
		for _, n := range owners {
			sum, most = sum+n, max(most, n)
		}
		return sum == chaosPartitions && len(owners) == len(x.workers) && most <= (chaosPartitions+len(x.workers)-1)/len(x.workers)
	})
}

// TestChaos lets three processes share sixteen partitions on a bus of three
// nodes, and breaks each kind of thing once, or as often as it is told.
func TestChaos(t *testing.T) {
	slow(t)
	series, days, rate := 300, 30, 300
	if *chaosSeries > 0 {
		series = *chaosSeries
	}
	if *chaosDays > 0 {
		days = *chaosDays
	}
	if *chaosRate > 0 {
		rate = *chaosRate
	}
	x := newChaos(t, 3, ordeal.Options{Days: days, Sites: (series + 8) / 9, Partitions: chaosPartitions, Across: true})
	x.begin(rate)
	x.board = x.look()
	names := slices.Sorted(maps.Keys(x.faults()))
	x.random.Shuffle(len(names), func(i, j int) { names[i], names[j] = names[j], names[i] })
	for i := range max(len(names), *chaosFaults) {
		name := names[i%len(names)]
		x.evenly()
		x.moment(400)
		if x.pub.left() == 0 {
			t.Logf("everything was published before fault %d", i+1)
			break
		}
		x.did[name]++
		x.faults()[name]()
	}
	x.evenly()
	x.finish()
	x.check()
}

// quiet reports whether everything is stored and delivered.
func (x *chaos) quiet() bool {
	code, out, _ := run(x.t, "status", "--json", "--config", x.workers[0].path)
	var s statusReply
	if code != 0 || json.Unmarshal([]byte(out), &s) != nil {
		return false
	}
	for _, p := range s.Partitions {
		if p.Position < p.End || slices.ContainsFunc(p.Outlets, func(o outletRow) bool { return o.Waiting > 0 }) {
			return false
		}
	}
	return len(s.Partitions) == chaosPartitions
}

// TestChaosOfOne has one process that owns everything, and a bus whose nodes die.
func TestChaosOfOne(t *testing.T) {
	slow(t)
	x := newChaos(t, 1, ordeal.Options{Days: 30, Sites: 32, Partitions: chaosPartitions})
	x.begin(400)
	for _, name := range []string{"node killed", "process killed", "node killed"} {
		x.moment(700)
		x.did[name]++
		x.faults()[name]()
	}
	x.finish()
	x.check()
}
