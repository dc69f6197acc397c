package monitor

import (
	"encoding/json"
	"fmt"
)

// countingHeader is what partitions told each other to count, as stored.
type countingHeader struct {
	Indicator string      `json:"indicator"`
	Life      string      `json:"life"`
	Strict    bool        `json:"strict,omitempty"`
	Lanes     []countLane `json:"lanes"`
	// InForce is absent where this partition does not count the indicator, and
	// OfSums where it does not gather its sums.
	InForce *counted `json:"in_force,omitempty"`
	OfSums  *counted `json:"of_sums,omitempty"`
}

func (e *Engine) countsChanged() { e.countsJSON = nil }

func (e *Engine) encodeCounts() json.RawMessage {
	if e.countsJSON != nil || len(e.countings) == 0 {
		return e.countsJSON
	}
	var list []countingHeader
	for _, k := range e.countings {
		h := countingHeader{Indicator: k.indicator, Life: k.life, Strict: k.strict, Lanes: k.lanes}
		if ix := e.indicatorNamed([]byte(k.indicator)); ix != nil && ix.counting == k {
			h.InForce = &ix.agreed
			if up := ix.summing(); up != nil {
				h.OfSums = &up.agreed
			}
		}
		list = append(list, h)
	}
	data, err := json.Marshal(list)
	if err != nil {
		panic(err) // structs of plain fields
	}
	e.countsJSON = data
	return data
}

// restoreCounts restores what was told. Where a store was written before anything
// was, partitions begin to count now.
func (e *Engine) restoreCounts(h *header) error {
	e.part, e.ahead, e.lives = h.Part, h.Ahead, h.Lives
	var list []countingHeader
	if len(h.Counts) > 0 {
		if err := json.Unmarshal(h.Counts, &list); err != nil {
			return fmt.Errorf("monitor: reading what partitions counted: %w", err)
		}
	}
	for _, x := range list {
		k := e.countingOf(x.Indicator, x.Life)
		if len(x.Lanes) != len(k.lanes) {
			return fmt.Errorf("monitor: %d partitions counted indicator %q, and there are %d: %w", len(x.Lanes)-1, x.Indicator, len(k.lanes)-1, errEncoding)
		}
		k.lanes, k.strict = x.Lanes, x.Strict
		ix := e.indicatorNamed([]byte(x.Indicator))
		if ix == nil || x.InForce == nil {
			continue
		}
		k.sums = ix.gathering != nil
		ix.counting, ix.agreed = k, x.InForce.whole()
		if up := ix.summing(); up != nil {
			up.counting, up.agreed = k, newCounted()
			if x.OfSums != nil {
				up.agreed = x.OfSums.whole()
			}
		}
	}
	for _, ix := range e.indicators {
		e.attend(ix, e.setup, false)
	}
	e.countsChanged()
	e.reheld()
	return nil
}

func (c *counted) whole() counted {
	x := *c
	if x.Pools == nil {
		x.Pools = map[int64]*poolCount{}
	}
	return x
}
