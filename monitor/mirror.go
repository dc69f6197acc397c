package monitor

import (
	"encoding/binary"
	"fmt"
	"slices"
)

// mirrorAll brings what the rows say into the mirrors.
func (e *Engine) mirrorAll(g *gathering, rows []summaryRow) []tiding {
	list := make([]tiding, len(rows))
	for i := range rows {
		r := &rows[i]
		m := g.mirrors[r.name]
		if m == nil {
			m = &series{
				number: uint32(len(e.series)), name: r.name, indicator: g.sums, birth: unborn, trimmed: never,
				mirror: true, retired: true, fresh: true,
			}
			m.telling()
			e.series = append(e.series, m)
			g.mirrors[r.name] = m
		}
		if r.head {
			m.birth, m.dates = r.birth, r.dates
		}
		for n := range r.cells {
			c := r.cells[n]
			*m.at(c.slot) = c
			m.eventIDs.set(c.slot, r.ids[n])
			m.dirty = append(m.dirty, c.slot)
		}
		e.touch(m)
		list[i] = tiding{m, r.from, r.to, r.head, r.why}
	}
	return list
}

// trimMirrors forgets of members what no look at gathered sums reads any more.
func (e *Engine) trimMirrors(g *gathering) {
	kept := g.sums.kept
	for _, m := range g.mirrors { // in any order: each is trimmed by itself
		n, _ := m.cells.find(kept)
		if m.trimmed = max(m.trimmed, kept); n > 0 {
			m.cells = m.cells[n:]
			m.eventIDs.forget(kept)
		}
	}
}

// encodeMirror writes what is known of a member of gathered sums.
func (s *series) encodeMirror(b []byte, at int, whole bool) []byte {
	if s.name == "" { // it is one no more
		b[at] = flagMirror | flagNamed
		return appendString(appendString(b, ""), "")
	}
	b[at] = flagMirror
	if whole || s.fresh {
		b[at] |= flagNamed
		b = appendString(appendString(b, s.name), s.indicator.cfg.Name)
	}
	b = binary.AppendVarint(b, s.birth)
	b = append(binary.AppendVarint(b, s.trimmed), flag(s.dates != nil))
	if s.dates != nil {
		b = s.dates.encode(b)
	}
	if whole {
		b = binary.AppendUvarint(b, uint64(len(s.cells)))
		for i := range s.cells {
			b = s.encodeCell(b, &s.cells[i])
		}
		return b
	}
	b = binary.AppendUvarint(b, uint64(len(s.dirty)))
	for _, slot := range s.dirty {
		c := cell{slot: slot} // trimmed since
		if i, ok := s.cells.find(slot); ok {
			c = s.cells[i]
		}
		b = s.encodeCell(b, &c)
	}
	return b
}

// overlayMirror lays one encoding over a mirror.
func (e *Engine) overlayMirror(s *series, r *reader, version, flags byte) error {
	if flags&flagNamed != 0 {
		*s = series{number: s.number, name: r.string(), cells: s.cells[:0]}
		if ix := e.indicatorNamed(r.bytes()); ix != nil && ix.gathering != nil {
			s.indicator = ix.gathering.sums
		}
	}
	if s.mirror, s.retired = true, true; s.name == "" {
		return r.err
	}
	s.birth, s.trimmed, s.dates = r.int(), r.int(), nil
	if r.flag() {
		s.dates = r.dates()
	}
	for range r.length() {
		c, _ := r.cell(s, version)
		*s.at(c.slot) = c
		s.eventIDs.set(c.slot, r.ids())
	}
	if len(r.b) > 0 {
		r.fail("bytes are left over")
	}
	return r.err
}

// restoreMirror puts a mirror back in its place.
func (e *Engine) restoreMirror(s *series) error {
	e.series = append(e.series, s)
	if s.name == "" {
		return nil
	}
	if s.indicator == nil {
		return fmt.Errorf("%w: nothing gathers what is known of %q", errEncoding, s.name)
	}
	s.cells = slices.DeleteFunc(s.cells, func(c cell) bool { return c.slot < s.trimmed })
	s.eventIDs.forget(s.trimmed)
	s.telling()
	s.indicator.of.gathering.mirrors[s.name] = s
	return nil
}
