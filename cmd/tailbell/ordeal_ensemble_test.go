package main

import (
	"maps"
	"slices"
	"testing"

	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/life"
	"tailbell/monitor/rehearse/ordeal"
)

// ensemble is an engine for each partition, which tell each other without a bus:
// what a plan leads to if nothing goes wrong.
type ensemble struct {
	t       *testing.T
	players []*player
}

type player struct {
	engine *monitor.Engine
	raws   []wire.Raw // still to come
	told   []monitor.Message
	heard  uint64 // how often it was told something
	alerts map[string]life.Record
}

// farOff is a position past everything that a plan has.
const farOff = 1 << 40

// ensembleOf plays a plan in all partitions, and returns their alerts.
func ensembleOf(t *testing.T, plan *ordeal.Plan, of int) (alerts [][]life.Record) {
	t.Helper()
	x := &ensemble{t: t}
	for number := range of {
		raws, _ := planned(plan, plan.Setups, number)
		x.players = append(x.players, &player{
			engine: monitor.New(monitor.Partition{Number: number, Of: of, KeyParts: 1}), raws: raws, alerts: map[string]life.Record{},
		})
	}
	decoder := wire.NewDecoder(wire.Limits{})
	for moved := true; moved; {
		moved = false
		for _, p := range x.players {
			moved = x.play(p, decoder) || moved
		}
	}
	for number, p := range x.players {
		if len(p.raws) > 0 {
			t.Fatalf("partition %d: %d messages of the plan wait for what no partition tells", number, len(p.raws))
		}
		for i := range p.told { // behind everything
			p.engine.Apply(&p.told[i])
		}
		x.drain(p)
		alerts = append(alerts, slices.Collect(maps.Values(p.alerts)))
	}
	return alerts
}

// play lets one partition go on as far as it can, and reports whether it moved.
func (x *ensemble) play(p *player, decoder *wire.Decoder) (moved bool) {
	for len(p.raws) > 0 {
		m := decoder.Decode(p.raws[0])
		for p.engine.Holds(&m) {
			if len(p.told) == 0 {
				x.drain(p)
				return moved
			}
			p.engine.ApplyAhead(&p.told[0])
			p.told = p.told[1:]
		}
		p.engine.Apply(&m)
		p.raws, moved = p.raws[1:], true
		if m.Position%100 == 0 {
			x.drain(p)
		}
	}
	x.drain(p)
	return moved
}

// drain takes what an engine found, and hands on what it tells.
func (x *ensemble) drain(p *player) {
	x.t.Helper()
	changes := p.engine.Drain()
	for i := range changes.Alerts {
		p.alerts[changes.Alerts[i].ID] = changes.Alerts[i]
	}
	for _, s := range changes.Summaries {
		summary, err := monitor.DecodeSummary(s.Data)
		if err != nil {
			x.t.Fatal(err)
		}
		to := x.players[s.Partition]
		to.heard++
		to.told = append(to.told, monitor.Message{Kind: monitor.SummaryMessage, Summary: summary, Position: farOff + to.heard})
	}
}
