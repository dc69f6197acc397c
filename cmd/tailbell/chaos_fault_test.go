package main

import (
	"encoding/json"
	"slices"
	"testing"
	"time"

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
