package monitor

import (
	"cmp"
	"slices"
)

// eventIDs are the ids of the observations with events that a series counts in
// its slots, by slot. Most series have none: events are rare.
type eventIDs []slotIDs

// slotIDs are the ids of one slot, sorted.
type slotIDs struct {
	slot int64
	ids  []string
}

func (c eventIDs) find(slot int64) (int, bool) {
	return slices.BinarySearchFunc(c, slot, func(x slotIDs, slot int64) int { return cmp.Compare(x.slot, slot) })
}

// of returns the ids of a slot.
func (c eventIDs) of(slot int64) []string {
	if i, ok := c.find(slot); ok {
		return c[i].ids
	}
	return nil
}

// set replaces the ids of a slot.
func (c *eventIDs) set(slot int64, ids []string) {
	i, ok := c.find(slot)
	switch {
	case ok && len(ids) == 0:
		*c = slices.Delete(*c, i, i+1)
	case ok:
		(*c)[i].ids = ids
	case len(ids) > 0:
		*c = slices.Insert(*c, i, slotIDs{slot, ids})
	}
}

// list lists (sign 1) or strikes out (sign -1) one id of a slot.
func (c *eventIDs) list(slot int64, id string, sign int) {
	ids := c.of(slot)
	i, ok := slices.BinarySearch(ids, id)
	switch {
	case sign > 0 && !ok:
		c.set(slot, slices.Insert(ids, i, id))
	case sign < 0 && ok:
		c.set(slot, slices.Delete(ids, i, i+1))
	}
}

// forget forgets the ids of the slots before one.
func (c *eventIDs) forget(before int64) {
	if n, _ := c.find(before); n > 0 {
		*c = slices.Delete(*c, 0, n)
	}
}
