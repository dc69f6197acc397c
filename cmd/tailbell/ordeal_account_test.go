package main

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/life"
	"tailbell/monitor/partition"
	"tailbell/monitor/rehearse"
	"tailbell/monitor/rehearse/audit"
	"tailbell/monitor/rehearse/ordeal"
	"tailbell/monitor/store"
)

// outcome is all that a partition's messages led to.
type outcome struct {
	Account monitor.Account
	Slots   []monitor.SlotSum
	Records []string
	Refused []monitor.Refusal

	alerts []life.Record
}

func (o *outcome) record(t *testing.T, alerts []life.Record) {
	t.Helper()
	for i := range alerts {
		text, err := json.Marshal(&alerts[i])
		if err != nil {
			t.Fatal(err)
		}
		o.Records = append(o.Records, string(text))
	}
	slices.Sort(o.Records)
	o.alerts = alerts
}

func slotOf(t *testing.T, a monitor.ArchivedSlot) monitor.SlotSum {
	t.Helper()
	var s monitor.SlotSum
	if err := json.Unmarshal(a.Data, &s); err != nil {
		t.Fatal(err)
	}
	return s
}

// merged puts archived slots under those still held, each once.
func merged(archived, held []monitor.SlotSum) []monitor.SlotSum {
	type key struct {
		series string
		start  monitor.Instant
	}
	all := map[key]monitor.SlotSum{}
	for _, s := range append(archived, held...) {
		if s.HasEvents || s.HasExposure {
			all[key{s.Series, s.Start}] = s
		} else {
			delete(all, key{s.Series, s.Start})
		}
	}
	list := make([]monitor.SlotSum, 0, len(all))
	for _, s := range all {
		list = append(list, s)
	}
	slices.SortFunc(list, func(a, b monitor.SlotSum) int {
		return cmpText(fmt.Sprintf("%s %020d", a.Series, a.Start), fmt.Sprintf("%s %020d", b.Series, b.Start))
	})
	return list
}

func cmpText(a, b string) int { return bytes.Compare([]byte(a), []byte(b)) }

// undisturbed applies messages to a new engine, in one go.
func undisturbed(t *testing.T, number int, raws []wire.Raw) *outcome {
	t.Helper()
	return undisturbedOf(t, 2, number, raws)
}

// undisturbedOf does so for one of more partitions.
func undisturbedOf(t *testing.T, of, number int, raws []wire.Raw) *outcome {
	t.Helper()
	e := monitor.New(monitor.Partition{Number: number, Of: of, KeyParts: 1})
	decoder := wire.NewDecoder(wire.Limits{})
	ahead := 0 // of the messages, up to where summaries were taken
	for i := range raws {
		m := decoder.Decode(raws[i])
		for e.Holds(&m) {
			ahead = takeAhead(t, e, decoder, raws, max(ahead, i+1))
		}
		e.Apply(&m)
	}
	changes := e.Drain()
	var archived []monitor.SlotSum
	for _, a := range changes.Archived {
		archived = append(archived, slotOf(t, a))
	}
	o := &outcome{Account: e.Account(), Slots: merged(archived, e.Slots()), Refused: changes.Refused}
	o.record(t, changes.Alerts)
	return o
}

// takeAhead lets an engine that holds a message take the next summary that stands
// further on, and returns after which message that is.
func takeAhead(t *testing.T, e *monitor.Engine, decoder *wire.Decoder, raws []wire.Raw, from int) int {
	t.Helper()
	for i := from; i < len(raws); i++ {
		if !strings.HasSuffix(raws[i].Subject, ".sum") {
			continue
		}
		if m := decoder.Decode(raws[i]); m.Kind == monitor.SummaryMessage && m.Position > e.Ahead() {
			e.ApplyAhead(&m)
			return i + 1
		}
	}
	t.Fatalf("a message after position %d waits for what no partition tells", e.Position())
	return 0
}

// ordealKinds are the last tokens of subjects.
var ordealKinds = map[ordeal.Kind]string{ordeal.Observations: "obs", ordeal.Act: "act", ordeal.Setting: "set", ordeal.Tick: "tick"}

// planned are the messages of a plan as a partition would read them if nothing
// went wrong; setups are the texts that the daemon announces.
func planned(plan *ordeal.Plan, setups [][]byte, number int) (raws []wire.Raw, elements [][]rehearse.Element) {
	for i := range plan.Messages {
		m := &plan.Messages[i]
		if m.Kind != ordeal.Setting && m.Partition != number {
			continue
		}
		raw := wire.Raw{Position: uint64(len(raws) + 1), Subject: fmt.Sprintf("ordeal.in.%d.%s", number, ordealKinds[m.Kind]), Data: m.Data}
		if m.Kind == ordeal.Tick {
			raw.Header = map[string][]string{wire.TimeHeader: {m.Time().Format(time.RFC3339)}}
		}
		if m.Kind == ordeal.Setting {
			raw.Data = setups[m.Setup]
		}
		raws = append(raws, raw)
		elements = append(elements, m.Elements)
	}
	return raws, elements
}

// stored is what a partition's store holds.
func stored(t *testing.T, setup *config.Setup, number int) *outcome {
	t.Helper()
	return outcomeOf(t, storePath(setup, number))
}

// outcomeOf is what the store in a file holds, which must be sound.
func outcomeOf(t *testing.T, path string) *outcome {
	t.Helper()
	st, err := store.OpenReadOnly(path, store.Options{})
	if err != nil {
		t.Fatal(err)
	}
	defer func() {
		if err := st.Close(); err != nil {
			t.Error(err)
		}
	}()
	if _, err := st.Check(t.Context()); err != nil {
		t.Errorf("%s: %v", path, err)
	}
	e, err := partition.Recover(st)
	if err != nil {
		t.Fatal(err)
	}
	var archived []monitor.SlotSum
	err = st.Archived(func(a monitor.ArchivedSlot) error {
		archived = append(archived, slotOf(t, a))
		return nil
	})
	rows, alertsErr := st.Alerts(store.AlertFilter{}, 0, 1_000_000)
	refused, refusedErr := st.Refused(0, 1_000_000)
	if err := errors.Join(err, alertsErr, refusedErr); err != nil {
		t.Fatal(err)
	}
	o := &outcome{Account: e.Account(), Slots: merged(archived, e.Slots())}
	var alerts []life.Record
	for i := range rows {
		alerts = append(alerts, rows[i].Record)
	}
	o.record(t, alerts)
	for i := range refused {
		o.Refused = append(o.Refused, refused[i].Refusal)
	}
	return o
}

// compareOutcomes tells the first difference.
func compareOutcomes(t *testing.T, what string, want, got *outcome) {
	t.Helper()
	same := func(part string, a, b any) {
		if diff := cmp.Diff(a, b); diff != "" {
			t.Errorf("%s: %s differ (-want +got):\n%.3000s", what, part, diff)
		}
	}
	same("accounts", want.Account, got.Account)
	same("slots", want.Slots, got.Slots)
	same("alert records", want.Records, got.Records)
	same("refusals", want.Refused, got.Refused)
}

// withoutPlaces leaves out of refusals where in the stream they were.
func withoutPlaces(o *outcome) *outcome {
	clean := *o
	clean.Refused = slices.Clone(o.Refused)
	for i := range clean.Refused {
		clean.Refused[i].Position = 0
	}
	return &clean
}

// checkLedger holds an outcome against the publisher's ledger of the elements,
// in the order in which they arrived.
func checkLedger(t *testing.T, plan *ordeal.Plan, elements [][]rehearse.Element, got *outcome) (slots int) {
	t.Helper()
	r := audit.Compare(&rehearse.Scenario{Ledger: rehearse.Reckon(plan.Rules, elements)}, got.Account, got.Slots, nil)
	for _, d := range r.Differences {
		t.Errorf("ledger: %s", d)
	}
	return r.Slots
}

// everything reads a partition's stream from its start to its end.
func everything(t *testing.T, b *bus.Bus, number int) []wire.Raw {
	t.Helper()
	end, err := b.EndOf(t.Context(), number)
	if err != nil {
		t.Fatal(err)
	}
	s, err := b.Source(t.Context(), number, 0)
	if err != nil {
		t.Fatal(err)
	}
	var raws []bus.Raw
	for s.Position() < end {
		if raws, err = s.Next(t.Context(), raws, 10_000, 64<<20); err != nil {
			t.Fatal(err)
		}
	}
	if err := s.Close(); err != nil {
		t.Error(err)
	}
	return raws
}

// arrived tells the elements of a stream's messages by their numbers, and how
// often each message of the plan is in it.
func arrived(t *testing.T, plan *ordeal.Plan, raws []wire.Raw, times map[int]int) (elements [][]rehearse.Element) {
	t.Helper()
	for i := range raws {
		values := raws[i].Header[numberHeader]
		if len(values) == 0 {
			elements = append(elements, nil)
			continue
		}
		n, err := strconv.Atoi(values[0])
		if err != nil || !bytes.Equal(plan.Messages[n].Data, raws[i].Data) {
			t.Fatalf("message %s at position %d is another one", values[0], raws[i].Position)
		}
		times[n]++
		elements = append(elements, plan.Messages[n].Elements)
	}
	return elements
}

// alertEvents reads the stream of alerts.
func alertEvents(t *testing.T, b *bus.Bus, name string) (list []delivery) {
	t.Helper()
	s, err := b.SubscribeAlerts(t.Context(), 0)
	if err != nil {
		t.Fatal(err)
	}
	info, err := b.AlertsEnd(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	var raws []bus.Raw
	for s.Position() < info {
		if raws, err = s.Next(t.Context(), raws, 10_000, 64<<20); err != nil {
			t.Fatal(err)
		}
	}
	if err := s.Close(); err != nil {
		t.Error(err)
	}
	for i := range raws {
		d, err := eventOf(raws[i].Data)
		if err != nil {
			t.Errorf("%s: %v", name, err)
		}
		list = append(list, d)
	}
	return list
}

func readFile(t *testing.T, path string) []byte {
	t.Helper()
	text, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	return text
}
