package monitor

import (
	"fmt"
	"maps"
	"slices"

	"tailbell/monitor/life"
)

// Memory is a store in memory: it keeps what a real one would, so that tests
// can stop an engine at any Drain and go on from what was kept.
type Memory struct {
	position uint64
	header   []byte
	states   map[uint32][]byte
	patches  []patchAt
	ids      map[int64][]IDChange
	settings []SettingChange
	Records  map[string]life.Record
	Steps    []life.Notice
	Refused  []Refusal
	Archive  map[string]ArchivedSlot
	// Told are the summaries for other partitions, in order, and waiting those
	// that wait here.
	Told    []OutSummary
	waiting map[uint64][]byte
}

type patchAt struct {
	cycle uint64
	SeriesChange
}

// NewMemory returns an empty store.
func NewMemory() *Memory {
	return &Memory{
		states: map[uint32][]byte{}, ids: map[int64][]IDChange{},
		Records: map[string]life.Record{}, Archive: map[string]ArchivedSlot{}, waiting: map[uint64][]byte{},
	}
}

// Commit keeps the changes, as a store's transaction would.
func (m *Memory) Commit(c Changes) {
	if c.Position > 0 {
		if c.Position <= m.position {
			panic("position does not move forward")
		}
		m.position = c.Position
	}
	m.header = c.Header
	for _, p := range c.Series {
		m.patches = append(m.patches, patchAt{c.Cycle, p})
	}
	whole := map[uint32]bool{}
	for _, s := range c.States {
		m.states[s.Number] = s.Data
		whole[s.Number] = true
	}
	// A state holds what all patches before it say.
	m.patches = slices.DeleteFunc(m.patches, func(p patchAt) bool { return p.cycle+2 <= c.Cycle || whole[p.Number] })
	for _, g := range c.RewrittenGenerations {
		delete(m.ids, g)
	}
	for _, id := range c.IDs {
		m.ids[id.Generation] = append(m.ids[id.Generation], id)
	}
	for _, g := range c.DroppedGenerations {
		delete(m.ids, g)
	}
	for _, r := range c.Alerts {
		m.Records[r.ID] = r
	}
	for _, a := range c.Archived {
		m.Archive[fmt.Sprintf("%d@%d", a.Number, a.Start)] = a
	}
	m.Steps = append(m.Steps, c.Steps...)
	m.Refused = append(m.Refused, c.Refused...)
	m.settings = append(m.settings, c.Settings...)
	m.Told = append(m.Told, c.Summaries...)
	for _, w := range c.Waiting {
		m.waiting[w.Number] = w.Data
	}
	for _, n := range c.Gathered {
		if m.waiting[n] == nil {
			panic("a summary is gathered that did not wait")
		}
		delete(m.waiting, n)
	}
}

// Reopen returns the engine that goes on from what was kept.
func (m *Memory) Reopen(p Partition) (*Engine, error) {
	snap := Snapshot{Position: m.position, Header: m.header, Settings: m.settings}
	for n, state := range m.states {
		snap.grow(n)
		snap.Series[n].State = state
	}
	for _, p := range m.patches {
		snap.grow(p.Number)
		snap.Series[p.Number].Patches = append(snap.Series[p.Number].Patches, p.Data)
	}
	for _, g := range slices.Sorted(maps.Keys(m.ids)) {
		snap.IDs = append(snap.IDs, m.ids[g]...)
	}
	for _, n := range slices.Sorted(maps.Keys(m.waiting)) {
		snap.Waiting = append(snap.Waiting, WaitingSummary{n, m.waiting[n]})
	}
	return Restore(p, &snap, func(id string) (life.Record, error) {
		r, ok := m.Records[id]
		if !ok {
			return r, fmt.Errorf("no record %q", id)
		}
		return r, nil
	})
}

func (s *Snapshot) grow(n uint32) {
	for uint32(len(s.Series)) <= n {
		s.Series = append(s.Series, SeriesImage{})
	}
}
