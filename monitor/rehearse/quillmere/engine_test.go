package quillmere

import (
	"encoding/json"
	"flag"
	"maps"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"tailbell/alert/words"
	"tailbell/config"
	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/life"
	"tailbell/monitor/rehearse"
)

var (
	seed  = flag.Uint64("seed", 1, "the scenario's seed")
	story = flag.String("story", "", "write every notice as plain sentences to this file")
)

// outcome is what an engine made of a scenario.
type outcome struct {
	account monitor.Account
	steps   []life.Notice
	records map[string]life.Record
	slots   []monitor.SlotSum
}

// play sends a scenario through the decoder and the engine, and drains it
// after every message, as an idle daemon does.
func play(t *testing.T, s *rehearse.Scenario) outcome {
	t.Helper()
	setup, err := config.Parse(s.Setup, "setup.toml")
	if err != nil {
		t.Fatal(err)
	}
	e := monitor.New(monitor.Partition{Number: 0, Of: 1, KeyParts: 1})
	e.Apply(&monitor.Message{Position: 1, Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
	d := wire.NewDecoder(wire.Limits{})
	out := outcome{records: make(map[string]life.Record)}
	for i := range s.Messages {
		m := d.Decode(wire.Raw{
			Position: uint64(i + 2), Subject: "quillmere.in.0." + string(s.Messages[i].Kind),
			Data: slices.Clone(s.Messages[i].Data),
		})
		e.Apply(&m)
		out.take(t, e.Drain())
	}
	out.account = e.Account()
	out.slots = append(out.slots, e.Slots()...)
	return out
}

// take keeps what a drain hands over, in copies that share nothing with the
// engine.
func (o *outcome) take(t *testing.T, c monitor.Changes) {
	t.Helper()
	for i := range c.Steps {
		o.steps = append(o.steps, copied(t, &c.Steps[i]))
	}
	for i := range c.Alerts {
		o.records[c.Alerts[i].ID] = copied(t, &c.Alerts[i])
	}
	for _, a := range c.Archived {
		var sum monitor.SlotSum
		if err := json.Unmarshal(a.Data, &sum); err != nil {
			t.Fatal(err)
		}
		o.slots = append(o.slots, sum)
	}
}

func copied[T any](t *testing.T, v *T) T {
	t.Helper()
	data, err := json.Marshal(v)
	if err != nil {
		t.Fatal(err)
	}
	var twin T
	if err := json.Unmarshal(data, &twin); err != nil {
		t.Fatal(err)
	}
	return twin
}

// TestEngineAgreesWithLedger plays the scenario through the decoder and the
// engine and holds the publishers' ledger beside it. Run with -seed for
// another one, and with -story FILE to read the alerts.
func TestEngineAgreesWithLedger(t *testing.T) {
	s := scenario(t, *seed)
	out := play(t, s)
	t.Run("classes", func(t *testing.T) { compareClasses(t, s, out.account) })
	t.Run("slots", func(t *testing.T) { compareSlots(t, s, out.slots) })
	t.Run("five of each", func(t *testing.T) { fiveOfEach(t, out.steps) })
	t.Run("planted", func(t *testing.T) { findPlanted(t, s, &out) })
	t.Run("mistakes", func(t *testing.T) { findMistakes(t, s, &out) })
	if *story != "" {
		writeStory(t, *story, out.steps)
	}
}

func compareClasses(t *testing.T, s *rehearse.Scenario, a monitor.Account) {
	t.Helper()
	want := s.Ledger.Count()
	got := map[rehearse.Class]int{
		rehearse.Counted: int(a.Counted), rehearse.Repeat: int(a.Repeat), rehearse.Replaced: int(a.Replaced),
		rehearse.Outdated: int(a.Outdated), rehearse.Refused: int(a.Refused), rehearse.Unmonitored: int(a.Unmonitored),
		rehearse.Withheld: int(a.Withheld),
	}
	if d := cmp.Diff(want, got); d != "" {
		t.Errorf("seed %d, classes (-ledger +engine):\n%s", s.Seed, d)
	}
	reasons := map[string]int{}
	ofActs := []monitor.Reason{monitor.BadAct, monitor.NoSuchAlert, monitor.NotAllowed}
	for r, n := range a.RefusedBy {
		if !slices.Contains(ofActs, r) {
			reasons[string(r)] = int(n)
		}
	}
	if d := cmp.Diff(s.Ledger.Reasons(), reasons); d != "" {
		t.Errorf("seed %d, reasons (-ledger +engine):\n%s", s.Seed, d)
	}
	if int(a.Acts+a.RefusedBy[monitor.BadAct]+a.RefusedBy[monitor.NoSuchAlert]+a.RefusedBy[monitor.NotAllowed]) != len(s.Ledger.Acts) {
		t.Errorf("seed %d: %d acts published, account %+v", s.Seed, len(s.Ledger.Acts), a)
	}
	if a.Acts < 10 {
		t.Errorf("seed %d: only %d acts met an alert", s.Seed, a.Acts)
	}
}

func compareSlots(t *testing.T, s *rehearse.Scenario, sums []monitor.SlotSum) {
	t.Helper()
	type key struct {
		series string
		start  monitor.Instant
	}
	type content struct {
		Events      int64
		Exposure    string
		HasExposure bool
	}
	got := make(map[key]content, len(sums))
	for _, x := range sums {
		k := key{x.Series, x.Start}
		if _, twice := got[k]; twice {
			t.Errorf("%s %s is there twice", x.Series, x.Start.Time())
		}
		if x.HasEvents || x.HasExposure {
			got[k] = content{x.Events, x.Exposure, x.HasExposure}
		}
	}
	for i := range s.Ledger.Slots {
		x := &s.Ledger.Slots[i]
		k := key{x.Series, monitor.InstantOf(x.Start)}
		want := content{x.Events, x.Exposure.String(), x.HasExposure}
		if have, ok := got[k]; !ok || have != want {
			t.Fatalf("seed %d: %s %s: engine %+v (%v), ledger %+v", s.Seed, x.Series, x.Start, have, ok, want)
		}
		delete(got, k)
	}
	if len(got) > 0 {
		t.Errorf("seed %d: %d slots that the ledger lacks, e.g. %+v", s.Seed, len(got), slices.Collect(maps.Keys(got))[0])
	}
}

func fiveOfEach(t *testing.T, steps []life.Notice) {
	t.Helper()
	have := map[string]int{}
	for i := range steps {
		n := &steps[i]
		have[string(n.Step.Kind)]++
		if n.Step.Kind == life.StepOpened {
			have[string(n.Record.Direction)]++
			if n.Record.Late {
				have["late"]++
			}
		}
	}
	t.Log(have)
	for _, kind := range []string{"upper", "lower", "late", "worsened", "returned", "withdrawn"} {
		if have[kind] < 5 {
			t.Errorf("only %d times %s", have[kind], kind)
		}
	}
}

func findPlanted(t *testing.T, s *rehearse.Scenario, out *outcome) {
	t.Helper()
	for _, x := range s.Planted {
		opened := time.Time{}
		for i := range out.steps {
			n := &out.steps[i]
			if n.Step.Kind == life.StepOpened && n.Record.Series == x.Series && string(n.Record.Direction) == string(x.Direction) &&
				n.Step.At.After(x.From) && n.Record.Opening.From.Before(x.To) {
				opened = n.Step.At
				break
			}
		}
		if opened.IsZero() {
			t.Errorf("seed %d: %s %s x%v of %s was not found", s.Seed, x.Series, x.Direction, x.Ratio, x.From)
			continue
		}
		t.Logf("%-50s %s x%-4v found after %s", x.Series, x.Direction, x.Ratio, opened.Sub(x.From).Round(time.Hour))
	}
}

func findMistakes(t *testing.T, s *rehearse.Scenario, out *outcome) {
	t.Helper()
	for _, x := range s.Mistakes {
		i := slices.IndexFunc(out.steps, func(n life.Notice) bool {
			return n.Step.Kind == life.StepWithdrawn && n.Record.Series == x.Series && string(n.Record.Direction) == string(x.Direction) &&
				n.Step.At.After(x.From) && n.Step.At.Before(x.Mended.Add(day))
		})
		if i < 0 {
			t.Logf("NOT WITHDRAWN: %s %s, %s, mended %s", x.Series, x.Direction, x.What, x.Mended)
		}
	}
}

func writeStory(t *testing.T, file string, steps []life.Notice) {
	t.Helper()
	var b strings.Builder
	for i := range steps {
		b.WriteString(words.Notice(&steps[i], 100))
	}
	if err := os.WriteFile(filepath.Clean(file), []byte(b.String()), 0o600); err != nil {
		t.Fatal(err)
	}
}
