package monitor

import (
	"encoding/binary"
	"slices"
)

// drain hands over the entries touched since the last one, and names the
// generations that are handed over whole, because most of what a store holds of
// them was replaced since.
func (x *ids) drain(r *room) (changes []IDChange, rewritten []int64) {
	if len(x.touched) == 0 {
		return nil, nil
	}
	changes = make([]IDChange, 0, len(x.touched))
	for _, t := range x.touched {
		c := x.entry(t.place)
		if c.put != t.put || c.generation == noGeneration {
			continue // put again, or dropped
		}
		changes = append(changes, x.change(c, r))
		number := c.generation
		g := x.generations[number]
		if g.written++; g.written > 2*len(g.places)+maxStale && !slices.Contains(rewritten, number) {
			rewritten = append(rewritten, number)
		}
	}
	x.touched = x.touched[:0]
	if len(rewritten) == 0 {
		return changes, nil
	}
	changes = slices.DeleteFunc(changes, func(c IDChange) bool { return slices.Contains(rewritten, c.Generation) })
	for _, number := range rewritten {
		g := x.generations[number]
		g.written = 0
		for _, place := range g.places {
			if c := x.entry(place); c.generation == number {
				changes = append(changes, x.change(c, r))
				g.written++
			}
		}
	}
	return changes, rewritten
}

func (x *ids) change(c *idEntry, r *room) IDChange {
	return IDChange{c.generation, r.keep(c.encode(r.next(), x.text(c)))}
}

// encode appends the entry to b, with its key.
func (c *idEntry) encode(b, key []byte) []byte {
	b = append(b, idVersion, flag(c.retracted))
	b = append(binary.AppendUvarint(b, uint64(c.site)), key[:c.site]...)
	b = append(binary.AppendUvarint(b, uint64(c.id)), key[c.site:]...)
	b = binary.AppendVarint(b, c.revision)
	b = append(b, flag(c.series != noPlace))
	if c.series == noPlace {
		return b
	}
	b = binary.AppendUvarint(b, uint64(c.series))
	b = binary.AppendVarint(b, int64(c.start))
	b = binary.AppendVarint(b, int64(c.end))
	b = binary.AppendVarint(b, c.events)
	b = binary.AppendUvarint(b, c.exposure.Hi)
	b = binary.AppendUvarint(b, c.exposure.Lo)
	return append(b, flag(c.hasEvents), flag(c.hasExposure), flag(c.late))
}
