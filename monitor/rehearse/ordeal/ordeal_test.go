package ordeal_test

import (
	"bytes"
	"encoding/json"
	"math/rand/v2"
	"testing"

	"tailbell/config"
	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/rehearse"
	"tailbell/monitor/rehearse/audit"
	"tailbell/monitor/rehearse/ordeal"
)

// play applies a partition's messages to a new engine.
func play(t *testing.T, p *ordeal.Plan, partition int) (*monitor.Engine, [][]rehearse.Element, []monitor.SlotSum) {
	t.Helper()
	e := monitor.New(monitor.Partition{Number: partition, Of: 2, KeyParts: 1})
	decoder := wire.NewDecoder(wire.Limits{})
	var elements [][]rehearse.Element
	for i, m := range p.Messages {
		raw := wire.Raw{Position: uint64(i + 1), Subject: "ordeal.in.0." + map[ordeal.Kind]string{ordeal.Observations: "obs", ordeal.Act: "act", ordeal.Setting: "set"}[m.Kind], Data: m.Data}
		if m.Kind == ordeal.Setting {
			raw.Data = p.Setups[m.Setup]
		} else if m.Partition != partition {
			continue
		}
		message := decoder.Decode(raw)
		e.Apply(&message)
		elements = append(elements, m.Elements)
	}
	var slots []monitor.SlotSum
	for _, a := range e.Drain().Archived {
		var s monitor.SlotSum
		if err := json.Unmarshal(a.Data, &s); err != nil {
			t.Fatal(err)
		}
		slots = append(slots, s)
	}
	return e, elements, append(slots, e.Slots()...)
}

// TestPlansAgree holds the engine against the ledger, and sees that a plan has
// something of everything.
func TestPlansAgree(t *testing.T) {
	seed := rand.Uint64()
	t.Logf("seed %d", seed)
	p, err := ordeal.Generate(seed, ordeal.Options{Days: 250, Settings: 3})
	if err != nil {
		t.Fatal(err)
	}
	var steps int
	for partition, site := range ordeal.Sites {
		if config.PartitionOf(site+"/ward-1/fall", 1, 2) != partition {
			t.Errorf("%s lies in another partition than %d", site, partition)
		}
		e, elements, slots := play(t, p, partition)
		ledger := rehearse.Reckon(p.Rules, elements)
		r := audit.Compare(&rehearse.Scenario{Ledger: ledger}, e.Account(), slots, nil)
		for _, d := range r.Differences {
			t.Errorf("partition %d: %s", partition, d)
		}
		count := ledger.Count()
		for _, class := range rehearse.Classes {
			if count[class] == 0 {
				t.Errorf("nothing is %s", class)
			}
		}
		for _, a := range e.Alerts() {
			steps += len(a.Steps)
		}
		if a := e.Account(); a.Acts == 0 || a.ActsRefused == 0 || a.Settings != 4 || a.Reruns == 0 {
			t.Errorf("acts %d, refused %d, settings %d, looks again %d", a.Acts, a.ActsRefused, a.Settings, a.Reruns)
		}
	}
	if steps < 50 {
		t.Errorf("only %d steps", steps)
	}
}

func TestPlansRepeat(t *testing.T) {
	var before *ordeal.Plan
	for range 2 {
		p, err := ordeal.Generate(7, ordeal.Options{Days: 60, Settings: 1, IDsOnly: true})
		if err != nil {
			t.Fatal(err)
		}
		if before == nil {
			before = p
			continue
		}
		for i := range p.Messages {
			if !bytes.Equal(p.Messages[i].Data, before.Messages[i].Data) || p.Messages[i].Kind != before.Messages[i].Kind {
				t.Fatalf("message %d differs", i)
			}
			for _, e := range p.Messages[i].Elements {
				if e.ID == "" && e.Fault == "" {
					t.Fatalf("no id in %s", e.JSON())
				}
			}
		}
	}
}
