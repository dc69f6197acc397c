package store

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"maps"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"

	"tailbell/monitor"
	"tailbell/monitor/life"

	"github.com/google/go-cmp/cmp"
	"github.com/google/go-cmp/cmp/cmpopts"
	"pgregory.net/rapid"
)

// twin is what a store must hold, kept in memory: a toy engine whose series
// are sets of keys and values. A patch is a JSON object of the keys that
// changed, a state one of all keys.
type twin struct {
	position uint64
	commits  int
	header   string
	series   []map[string]string
	next     int // where the checkpoint stands
	cycle    uint64
	ids      []monitor.IDChange
	settings []monitor.SettingChange
	alerts   []life.Record
	refused  []monitor.Refusal
	steps    []life.Notice
	archived []monitor.ArchivedSlot
	from     monitor.Instant // when the archive begins
	letGo    uint64
	outlets  map[string]uint64
	kept     map[string]uint64    // the same as far as a write has made it durable
	told     []monitor.OutSummary // what others are yet to be told
	waiting  []monitor.WaitingSummary
	waited   uint64
}

func (w *twin) clone() *twin {
	c := *w
	c.series = make([]map[string]string, len(w.series))
	for i, m := range w.series {
		c.series[i] = maps.Clone(m)
	}
	c.ids, c.settings, c.alerts = slices.Clone(w.ids), slices.Clone(w.settings), slices.Clone(w.alerts)
	c.refused, c.steps, c.archived = slices.Clone(w.refused), slices.Clone(w.steps), slices.Clone(w.archived)
	c.outlets, c.kept = maps.Clone(w.outlets), maps.Clone(w.kept)
	c.told, c.waiting = slices.Clone(w.told), slices.Clone(w.waiting)
	return &c
}

// keep says that a write was made durable.
func (w *twin) keep() { w.kept = maps.Clone(w.outlets) }

// batch makes a random batch of changes and applies it to the twin.
func (w *twin) batch(t *rapid.T) monitor.Changes {
	w.position += uint64(rapid.IntRange(1, 50).Draw(t, "messages"))
	w.commits++
	c := monitor.Changes{Position: w.position}
	if rapid.Bool().Draw(t, "header") {
		w.header = fmt.Sprint("header ", w.position)
		c.Header = []byte(w.header)
	}
	w.touch(t, &c)
	w.checkpoint(t, &c)
	w.register(t, &c)
	w.refuse(t, &c)
	w.ring(t, &c)
	w.summarise(t, &c)
	for rapid.IntRange(0, 9).Draw(t, "setting") == 0 { // perhaps several in one commit
		setting := monitor.SettingChange{Version: len(w.settings) + 1, Digest: fmt.Sprint(w.position), Text: []byte("x = 1")}
		w.settings, c.Settings = append(w.settings, setting), append(c.Settings, setting)
	}
	return c
}

// summarise adds summaries for other partitions, and lets those of others come
// and go.
func (w *twin) summarise(t *rapid.T, c *monitor.Changes) {
	for range rapid.IntRange(0, 2).Draw(t, "told") {
		out := monitor.OutSummary{Partition: rapid.IntRange(0, 9).Draw(t, "home"), Data: []byte(fmt.Sprint("summary of ", w.position))}
		w.told, c.Summaries = append(w.told, out), append(c.Summaries, out)
	}
	for len(w.waiting) > 0 && rapid.Bool().Draw(t, "gathered") {
		c.Gathered = append(c.Gathered, w.waiting[0].Number)
		w.waiting = w.waiting[1:]
	}
	for range rapid.IntRange(0, 2).Draw(t, "waiting") {
		w.waited++
		row := monitor.WaitingSummary{Number: w.waited, Data: []byte(fmt.Sprint("waits since ", w.position))}
		w.waiting, c.Waiting = append(w.waiting, row), append(c.Waiting, row)
	}
}

func (w *twin) touch(t *rapid.T, c *monitor.Changes) {
	touched := map[int]map[string]string{}
	for range rapid.IntRange(0, 5).Draw(t, "touched") {
		n := rapid.IntRange(0, len(w.series)).Draw(t, "series")
		if n == len(w.series) {
			w.series = append(w.series, map[string]string{})
		}
		key := rapid.SampledFrom([]string{"a", "b", "c", "d"}).Draw(t, "key")
		value := fmt.Sprint(w.position, "/", len(touched))
		w.series[n][key] = value
		if touched[n] == nil {
			touched[n] = map[string]string{}
		}
		touched[n][key] = value
	}
	for _, n := range slices.Sorted(maps.Keys(touched)) {
		c.Series = append(c.Series, monitor.SeriesChange{Number: uint32(n), Data: toJSON(touched[n])})
	}
}

// checkpoint writes the next slice of series whole; the round ends with the
// last series.
func (w *twin) checkpoint(t *rapid.T, c *monitor.Changes) {
	c.Cycle = w.cycle
	for range rapid.IntRange(0, 4).Draw(t, "slice") {
		if w.next >= len(w.series) {
			break
		}
		c.States = append(c.States, monitor.SeriesChange{Number: uint32(w.next), Data: toJSON(w.series[w.next])})
		w.next++
	}
	if len(w.series) > 0 && w.next == len(w.series) {
		w.next, w.cycle = 0, w.cycle+1
	}
}

func (w *twin) register(t *rapid.T, c *monitor.Changes) {
	for i := range rapid.IntRange(0, 6).Draw(t, "ids") {
		id := monitor.IDChange{
			Generation: int64(rapid.IntRange(-2, 3).Draw(t, "generation")),
			Value:      fmt.Appendf(nil, "id %d.%d", w.position, i),
		}
		c.IDs = append(c.IDs, id)
	}
	if len(c.IDs) > 0 && rapid.IntRange(0, 4).Draw(t, "rewrite") == 0 {
		g := c.IDs[0].Generation // all that still counts of it is in c.IDs
		c.RewrittenGenerations = append(c.RewrittenGenerations, g)
		w.ids = slices.DeleteFunc(w.ids, func(id monitor.IDChange) bool { return id.Generation == g })
	}
	w.ids = append(w.ids, c.IDs...)
	if rapid.IntRange(0, 4).Draw(t, "drop") == 0 {
		g := int64(rapid.IntRange(-2, 3).Draw(t, "dropped"))
		c.DroppedGenerations = append(c.DroppedGenerations, g)
		w.ids = slices.DeleteFunc(w.ids, func(id monitor.IDChange) bool { return id.Generation == g })
	}
	for i := range rapid.IntRange(0, 2).Draw(t, "archived") {
		if len(w.series) == 0 {
			break
		}
		day := rapid.IntRange(-3, 30).Draw(t, "day")
		slot := monitor.ArchivedSlot{Number: uint32(i % len(w.series)), Start: dayBegins(int64(day)) + monitor.Instant(i), Data: fmt.Appendf(nil, "%d.%d", w.position, i)}
		w.archived, c.Archived = append(w.archived, slot), append(c.Archived, slot)
	}
	w.let(t, c)
}

// let moves on when the archive begins.
func (w *twin) let(t *rapid.T, c *monitor.Changes) {
	if rapid.IntRange(0, 9).Draw(t, "archive") == 0 {
		w.from = max(w.from, dayBegins(int64(rapid.IntRange(-5, 20).Draw(t, "from"))))
	}
	if w.from != monitor.Beginning {
		from := w.from
		c.ArchiveFrom = &from
	}
	kept := slices.DeleteFunc(slices.Clone(w.archived), func(s monitor.ArchivedSlot) bool { return s.Start < w.from })
	w.letGo += uint64(len(w.archived) - len(kept))
	w.archived = kept
}

func (w *twin) refuse(t *rapid.T, c *monitor.Changes) {
	for i := range rapid.IntRange(0, 3).Draw(t, "refused") {
		r := monitor.Refusal{
			Position: w.position, Index: i, At: monitor.Instant(w.position),
			Reason: rapid.SampledFrom([]monitor.Reason{monitor.NotJSON, monitor.Conflict}).Draw(t, "reason"),
			Detail: "what is wrong",
		}
		if i > 0 {
			r.Raw = []byte(strings.Repeat("r", i*40))
		}
		w.refused, c.Refused = append(w.refused, r), append(c.Refused, r)
	}
}

// ring opens alerts, or moves those that are there.
func (w *twin) ring(t *rapid.T, c *monitor.Changes) {
	for range rapid.IntRange(0, 2).Draw(t, "alerts") {
		n := rapid.IntRange(0, len(w.alerts)).Draw(t, "alert")
		if n == len(w.alerts) {
			w.alerts = append(w.alerts, life.Record{ID: fmt.Sprintf("id-%d", n), Series: "quillmere-east/ward-3/falls", Direction: life.Upper})
		}
		r := w.alerts[n]
		if slices.ContainsFunc(c.Alerts, func(a life.Record) bool { return a.ID == r.ID }) {
			continue
		}
		r.Condition = rapid.SampledFrom([]life.Condition{
			life.Unacknowledged, life.Acknowledged, life.Returned, life.Closed, life.Withdrawn,
		}).Draw(t, "condition")
		r.Steps = append(slices.Clone(r.Steps), life.Step{Number: len(r.Steps) + 1, Condition: r.Condition})
		w.alerts[n] = r
		c.Alerts = append(c.Alerts, r)
		c.Steps = append(c.Steps, life.Notice{Key: fmt.Sprint(r.ID, "/", len(r.Steps)), Step: r.Steps[len(r.Steps)-1], Record: r})
	}
	w.steps = append(w.steps, c.Steps...)
}

func toJSON(m map[string]string) []byte {
	b, err := json.Marshal(m)
	if err != nil {
		panic(err)
	}
	return b
}

// overlay returns a series as its image says: patches over the state, in order.
func overlay(image monitor.SeriesImage) (map[string]string, error) {
	m := map[string]string{}
	for _, b := range append([][]byte{image.State}, image.Patches...) {
		if b == nil {
			continue
		}
		if err := json.Unmarshal(b, &m); err != nil {
			return nil, err
		}
	}
	return m, nil
}

// compare returns how a store differs from the twin.
func (w *twin) compare(s *Store) error {
	snap, err := s.Snapshot()
	if err != nil {
		return err
	}
	var series []map[string]string
	for _, image := range snap.Series {
		m, err := overlay(image)
		if err != nil {
			return err
		}
		series = append(series, m)
	}
	var open []life.Record
	for _, r := range w.alerts {
		if !r.Done() {
			open = append(open, r)
		}
	}
	return errors.Join(
		differ("position", snap.Position, w.position),
		differ("header", string(snap.Header), w.header),
		differ("series", series, w.series),
		differ("ids", snap.IDs, w.ids),
		differ("settings", snap.Settings, w.settings),
		differ("open alerts", snap.Alerts, open),
		differ("waiting", snap.Waiting, w.waiting),
		w.compareRows(s),
	)
}

func (w *twin) compareRows(s *Store) error {
	alerts, err := s.Alerts(AlertFilter{}, 0, 1<<30)
	if err != nil {
		return err
	}
	var records []life.Record
	for _, row := range alerts {
		records = append(records, row.Record)
	}
	rows, err := s.Refused(0, 1<<30)
	if err != nil {
		return err
	}
	var refusals []monitor.Refusal
	for _, row := range rows {
		refusals = append(refusals, row.Refusal)
	}
	counts, err := s.RefusedCount()
	if err != nil {
		return err
	}
	want := map[monitor.Reason]uint64{}
	for _, r := range w.refused {
		want[r.Reason]++
	}
	var slots []monitor.ArchivedSlot
	if err := s.Archived(func(slot monitor.ArchivedSlot) error {
		slots = append(slots, slot)
		return nil
	}); err != nil {
		return err
	}
	archive, err := s.Archive()
	if err != nil {
		return err
	}
	byDay := slices.Clone(w.archived) // a day's in the order of their writing
	slices.SortStableFunc(byDay, func(a, b monitor.ArchivedSlot) int { return int(dayOf(a.Start) - dayOf(b.Start)) })
	errs := []error{
		differ("let go", archive.LetGo, w.letGo), differ("kept", archive.Slots, uint64(len(w.archived))),
		differ("alerts", records, w.alerts), differ("refused", refusals, w.refused),
		differ("reasons", counts, want), differ("archived", slots, byDay),
	}
	for name, delivered := range w.outlets {
		pending, err := s.Pending(name, 1<<30)
		if err != nil {
			return err
		}
		var notices []life.Notice
		for _, row := range pending {
			notices = append(notices, row.Notice)
		}
		errs = append(errs, differ("outbox of "+name, notices, w.steps[delivered:]))
	}
	told, err := s.Told(0, 1<<30)
	if err != nil {
		return err
	}
	var out []monitor.OutSummary
	for _, row := range told {
		out = append(out, row.OutSummary)
	}
	return errors.Join(append(errs, differ("told", out, w.told))...)
}

// differ returns how two values differ. Their JSON is compared first, because
// it is much faster.
func differ[T any](what string, have, want T) error {
	a, errA := json.Marshal(have)
	b, errB := json.Marshal(want)
	if errA == nil && errB == nil && bytes.Equal(a, b) {
		return nil
	}
	if d := cmp.Diff(want, have, cmpopts.EquateEmpty()); d != "" {
		return fmt.Errorf("%s (-want +have):\n%s", what, d)
	}
	return nil
}

// TestTwin drives a store and its twin through random commits, deliveries,
// failing commits, kills and restarts; after each they must agree.
func TestTwin(t *testing.T) {
	folder := t.TempDir()
	fresh := filepath.Join(folder, "fresh.db")
	if err := lay(fresh, testIdentity); err != nil {
		t.Fatal(err)
	}
	run := 0
	rapid.Check(t, func(rt *rapid.T) {
		run++
		m := &machine{
			w: &twin{
				from: monitor.Beginning, outlets: map[string]uint64{"bus": 0, "terminal": 0}, kept: map[string]uint64{"bus": 0, "terminal": 0},
			},
			folder: filepath.Join(folder, fmt.Sprint(run)),
		}
		if err := os.Mkdir(m.folder, 0o700); err != nil {
			rt.Fatal(err)
		}
		m.goOn(rt, fresh)
		if err := m.s.Outlets(FromEnd, "bus", "terminal"); err != nil {
			rt.Fatal(err)
		}
		defer func() {
			if err := m.s.Close(); err != nil {
				rt.Error(err)
			}
		}()
		rt.Repeat(map[string]func(*rapid.T){
			"commit":  m.commit,
			"commit2": m.commit,
			"commit3": m.commit,
			"fail":    m.fail,
			"deliver": m.deliver,
			"soon":    m.deliverSoon,
			"tell":    m.tell,
			"restart": m.restart,
			"kill":    m.kill,
			"":        m.compare,
		})
		leaveRapid(rt, m.s)
	})
}

type machine struct {
	s      *Store
	w      *twin
	folder string
	copies int
}

func (m *machine) commit(t *rapid.T) {
	c := m.w.batch(t)
	if err := m.s.Commit(c, Mark{Position: c.Position}); err != nil {
		t.Fatal(err)
	}
	m.w.keep()
}

// fail breaks a commit off at a random step and starts again from the file.
func (m *machine) fail(t *rapid.T) {
	step := rapid.SampledFrom([]string{"commit", "commit written", "commit durable"}).Draw(t, "step")
	after := m.w.clone()
	c := after.batch(t)
	broken := errors.New("broken")
	m.s.fault = func(s string) error {
		if s == step {
			return broken
		}
		return nil
	}
	if err := m.s.Commit(c, Mark{}); !errors.Is(err, broken) {
		t.Fatalf("a broken commit gave %v", err)
	}
	if step == "commit durable" {
		m.w = after
		m.w.keep()
	}
	m.restart(t)
}

func (m *machine) deliver(t *rapid.T) {
	name := rapid.SampledFrom([]string{"bus", "terminal"}).Draw(t, "outlet")
	n := uint64(rapid.IntRange(0, len(m.w.steps)).Draw(t, "delivered"))
	if err := m.s.Delivered(name, n, 0); err != nil {
		t.Fatal(err)
	}
	m.w.outlets[name] = max(m.w.outlets[name], n)
	m.w.keep()
}

// deliverSoon is deliver, undone by a restart before the next write.
func (m *machine) deliverSoon(t *rapid.T) {
	name := rapid.SampledFrom([]string{"bus", "terminal"}).Draw(t, "outlet")
	n := uint64(rapid.IntRange(0, len(m.w.steps)).Draw(t, "delivered"))
	if err := m.s.DeliveredSoon(name, n, 0); err != nil {
		t.Fatal(err)
	}
	m.w.outlets[name] = max(m.w.outlets[name], n)
}

// tell notes that some of the summaries were told.
func (m *machine) tell(t *rapid.T) {
	rows, err := m.s.Told(0, 1<<30)
	if err != nil || len(rows) == 0 {
		return
	}
	n := rapid.IntRange(1, len(rows)).Draw(t, "told")
	for range 2 { // saying it again does nothing
		if err := m.s.DoneTelling(rows[n-1].Number); err != nil {
			t.Fatal(err)
		}
	}
	m.w.told = m.w.told[n:]
	m.w.keep()
}

func (m *machine) restart(t *rapid.T) {
	leaveRapid(t, m.s)
	m.open(t, m.s.path)
	m.w.outlets = maps.Clone(m.w.kept)
}

// kill goes on from a copy of the file as it lies there now.
func (m *machine) kill(t *rapid.T) {
	was := m.s
	m.goOn(t, was.path)
	if err := was.Close(); err != nil {
		t.Fatal(err)
	}
	m.w.outlets = maps.Clone(m.w.kept)
}

// goOn opens a copy of a file.
func (m *machine) goOn(t *rapid.T, from string) {
	b, err := os.ReadFile(from)
	if err != nil {
		t.Fatal(err)
	}
	m.copies++
	path := filepath.Join(m.folder, fmt.Sprintf("copy-%d.db", m.copies))
	if err := os.WriteFile(path, b, 0o600); err != nil {
		t.Fatal(err)
	}
	m.open(t, path)
}

func (m *machine) open(t *rapid.T, path string) {
	s, err := Open(path, testIdentity, Options{})
	if err != nil {
		t.Fatal(err)
	}
	m.s = quick(s)
}

func (m *machine) compare(t *rapid.T) {
	if err := m.w.compare(m.s); err != nil {
		t.Fatal(err)
	}
}

func leaveRapid(t *rapid.T, s *Store) {
	report, err := s.Check(t.Context())
	if err != nil {
		t.Fatalf("check: %v\n%s", err, strings.Join(report.Faults, "\n"))
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
}
