package monitor

import "slices"

// cell is what is known of one slot of one series. There are very many: no pointer
// in it is followed by the garbage collector.
type cell struct {
	slot     int64
	events   int64
	exposure Quantity
	// saysEvents and saysExposure count the contributions that stand on each
	// side: at zero the side is absent, which is not zero.
	saysEvents   uint32
	saysExposure uint32
	// items counts the elements whose interval begins in this slot.
	items uint32
	// provisional says that in a sum some of the exposure was carried forward.
	provisional bool
	// revised says that it changed after it had been signed off.
	revised bool
	// late is how many of the events came after the slot had settled.
	late int64
}

// cells is sorted by slot; slots without a cell are absent on both sides.
type cells []cell

func (cs cells) find(slot int64) (int, bool) {
	n := len(cs)
	if n == 0 || slot > cs[n-1].slot {
		return n, false
	}
	// Most lists have no gaps: the slot's cell is as far from the last.
	if i := int64(n) - 1 - (cs[n-1].slot - slot); i >= 0 && cs[i].slot == slot {
		return int(i), true
	}
	return slices.BinarySearchFunc(cs, slot, func(c cell, s int64) int {
		switch {
		case c.slot < s:
			return -1
		case c.slot > s:
			return 1
		}
		return 0
	})
}

// at returns the slot's cell, made if need be; it is valid until the next
// call.
func (s *series) at(slot int64) *cell {
	i, ok := s.cells.find(slot)
	if !ok {
		s.makeRoom()
		if i == len(s.cells) {
			s.cells = append(s.cells, cell{slot: slot})
		} else {
			s.cells = slices.Insert(s.cells, i, cell{slot: slot})
		}
	}
	return &s.cells[i]
}

// makeRoom moves a full list down over the cells that left its array, if they
// are a fifth of it or more; else it grows by a quarter: there are very many
// lists, and doubling would leave half their memory unused.
func (s *series) makeRoom() {
	n := len(s.cells)
	if n < cap(s.cells) {
		return
	}
	if gone := cap(s.array) - n; n > 0 && gone >= n/4+1 {
		all := s.array[:cap(s.array)]
		copy(all, s.cells)
		s.cells = all[:n]
		return
	}
	s.array = append(make(cells, 0, n+n/4+1), s.cells...)
	s.cells = s.array
}

// between returns the cells of the slots in [from, to).
func (cs cells) between(from, to int64) cells {
	i, _ := cs.find(from)
	j, _ := cs.find(to)
	return cs[i:j]
}

// sides says which sides of a slot need an observation to be known.
type sides struct{ events, exposure bool }

func (s sides) paired(c *cell) bool {
	return (!s.events || c.saysEvents > 0) && (!s.exposure || c.saysExposure > 0)
}
