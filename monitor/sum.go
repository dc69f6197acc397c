package monitor

import (
	"cmp"
	"slices"

	"tailbell/config"
	"tailbell/monitor/life"
)

// rollup is what makes a series a sum: its slots are the sums of those of its
// members. They follow from the members' slots, up to the latest boundary, and
// are neither stored nor archived.
type rollup struct {
	// rule is the place of its rule among the indicator's sums.
	rule int
	// members are in order of their numbers.
	members []*series
}

// ruleOf tells series apart that are no peers: the members, and the sums by one
// rule.
func (s *series) ruleOf() int {
	if s.sum == nil {
		return -1
	}
	return s.sum.rule
}

// needs says which sides of a slot need an observation. A sum needs both: what
// its members don't need is filled in when they are summed.
func (s *series) needs() sides {
	if s.sum != nil {
		return sides{events: true, exposure: true}
	}
	return s.indicator.needs
}

// exposureFrom says where the exposure of the series' cells comes from.
func (s *series) exposureFrom() config.Exposure {
	if s.sum != nil {
		return config.Reported
	}
	return s.indicator.cfg.Exposure
}

// newSums returns the names of the sums that the series would be the first
// member of.
func (e *Engine) newSums(ix *indicator, name string) []string {
	var names []string
	for _, m := range ix.cfg.Sums {
		if sum, ok := m.NameFor(name); ok && !m.Gathered(e.partition.KeyParts) && e.byName[sum] == nil && !slices.Contains(names, sum) {
			names = append(names, sum)
		}
	}
	return names
}

// link makes the series a member of its sums, which are made where they are
// missing.
func (e *Engine) link(s *series) {
	ix := s.indicator
	for rule, m := range ix.cfg.Sums {
		name, ok := m.NameFor(s.name)
		if !ok {
			continue
		}
		if m.Gathered(e.partition.KeyParts) {
			s.telling()
			continue
		}
		sum := e.byName[name]
		if sum == nil {
			sum = e.enter(ix, name)
		}
		if sum.sum == nil {
			sum.sum = &rollup{rule: rule}
			ix.sums = inserted(ix.sums, sum)
		}
		if !slices.Contains(s.sums, sum) { // two rules may come to the same
			s.sums = append(s.sums, sum)
			sum.sum.members = inserted(sum.sum.members, s)
		}
	}
}

// inserted puts the series into a list that is in order of numbers.
func inserted(list []*series, s *series) []*series {
	i, _ := slices.BinarySearchFunc(list, s, func(a, b *series) int { return cmp.Compare(a.number, b.number) })
	return slices.Insert(list, i, s)
}

// relink links all series after they were restored, and sums what they hold.
func (e *Engine) relink() {
	for _, s := range e.series {
		if !s.retired && !config.IsSum(s.name) {
			e.link(s)
		}
	}
	e.relinkHeirs()
	e.relinkAllGathered()
	for _, ix := range e.indicators {
		slices.SortFunc(ix.sums, func(a, b *series) int { return cmp.Compare(a.number, b.number) })
		for _, sum := range ix.sums {
			if sum.birth != unborn && ix.started {
				ix.resum(sum, sum.birth, ix.looked-1)
			}
		}
	}
}

// resum sums the slots from one to another, both included, as far as looks have
// come.
func (ix *indicator) resum(sum *series, from, to int64) {
	from = max(from, sum.birth, sum.trimmed)
	to = min(to, ix.looked-1)
	if sum.heir != nil {
		to = min(to, sum.heir.until-1)
	}
	for slot := from; slot <= to; slot++ {
		c, counted := ix.sumOf(sum, slot)
		i, had := sum.cells.find(slot)
		switch {
		case counted:
			*sum.at(slot) = c
		case had:
			sum.cells = slices.Delete(sum.cells, i, i+1)
		default:
			continue
		}
		sum.resumed(slot)
	}
}

// sumOf sums one slot of the members that are in force then. A side is known
// where all of them know it. counted is false where none is in force.
func (ix *indicator) sumOf(sum *series, slot int64) (c cell, counted bool) {
	c.slot = slot
	var members, events, exposures int
	for _, m := range sum.parts() {
		if !m.inForce(slot) {
			continue
		}
		members++
		n, known := ix.eventsOf(m, slot)
		if c.events += n; known {
			events++
		}
		if i, ok := m.cells.find(slot); ok {
			c.late += m.cells[i].late
			c.revised = c.revised || m.cells[i].revised
		}
		ix.eachExposure(m, slot, slot+1, func(_ int64, q Quantity, provisional bool) {
			c.exposure = c.exposure.add(q)
			c.provisional = c.provisional || provisional
			exposures++
		})
	}
	if members == 0 {
		return c, false
	}
	if events == members {
		c.saysEvents = 1
	}
	if exposures == members {
		c.saysExposure = 1
	}
	return c, true
}

// fillSums sums the slot before the boundary, which is about to be looked at.
func (e *Engine) fillSums(ix *indicator, boundary int64) {
	for _, sum := range ix.sums {
		ix.resum(sum, boundary-1, boundary-1)
	}
	if !ix.inherits {
		return
	}
	for _, s := range ix.series {
		if s.inherited(boundary - 1) {
			ix.resum(s, boundary-1, boundary-1)
			e.inform(s, boundary-1, boundary-1, false, "")
		}
	}
}

// sumChanges carries the changes of members into their sums, and returns what
// changes there: one change a sum, in order of their numbers. The changes of all
// members must have been made.
func (e *Engine) sumChanges(changes []change) []change {
	var list []change
	for i := range changes {
		c := &changes[i]
		ix := c.series.indicator
		from, to := c.from, ix.carriedTo(c)
		if c.reborn {
			from, to = c.series.birth, max(to, min(c.birth, ix.looked)-1)
		}
		if c.series.news != nil {
			last := c.to
			if c.reborn {
				last = max(last, min(c.birth, ix.looked)-1)
			}
			e.inform(c.series, from, last, c.reborn, "")
		}
		for _, sum := range c.series.sums {
			list = e.changeSum(list, sum, from, to)
		}
		list = e.changeHeirs(list, c.series, from, to)
	}
	slices.SortFunc(list, func(a, b change) int { return cmp.Compare(a.series.number, b.series.number) })
	return list
}

// changeSum sums the slots of a sum again, which may begin earlier now, and adds
// the change to the list.
func (e *Engine) changeSum(list []change, sum *series, from, to int64) []change {
	ix := sum.indicator
	c := change{series: sum, birth: sum.birth}
	birth := int64(unborn)
	for _, m := range sum.parts() {
		birth = min(birth, m.birth)
	}
	if birth < sum.birth {
		sum.birth, c.reborn = birth, true
		e.touch(sum)
	}
	e.inform(sum, from, to, c.reborn, "")
	if sum.isGathered() {
		e.touch(sum)
	}
	ix.resum(sum, from, to)
	c.from, c.to = max(from, ix.frozenAt), to
	if i := slices.IndexFunc(list, func(x change) bool { return x.series == sum }); i >= 0 {
		old := &list[i]
		old.from, old.to = min(old.from, c.from), max(old.to, c.to)
		if c.reborn && !old.reborn {
			old.reborn, old.birth = true, c.birth
		}
		return list
	}
	return append(list, c)
}

// mostCarriers is the most members of a sum that evidence lists.
const mostCarriers = 12

// carriers lists the members of a sum that had events in the slots [from, to),
// those with the most first.
func (ix *indicator) carriers(sum *series, from, to int64) (list []life.Carrier, more int) {
	if sum.sum == nil {
		return nil, 0
	}
	for _, m := range sum.sum.members {
		c := life.Carrier{Series: m.name}
		var exposure Quantity
		for slot := max(from, m.birth); slot < to; slot++ {
			if !m.inForce(slot) {
				continue
			}
			n, _ := ix.eventsOf(m, slot)
			c.Events += n
			ix.eachExposure(m, slot, slot+1, func(_ int64, q Quantity, _ bool) { exposure = exposure.add(q) })
		}
		if c.Events > 0 {
			c.Exposure = exposure.decimal(ix.cfg.GrainDigits)
			list = append(list, c)
		}
	}
	slices.SortStableFunc(list, func(a, b life.Carrier) int {
		return cmp.Or(cmp.Compare(b.Events, a.Events), cmp.Compare(a.Series, b.Series))
	})
	if len(list) > mostCarriers {
		list, more = list[:mostCarriers], len(list)-mostCarriers
	}
	return list, more
}

// idsIn lists the ids of observations with events in the slots [from, to), of a
// sum those of its members.
func (s *series) idsIn(from, to int64) (ids []string, more int) {
	members := []*series{s}
	if s.sum != nil {
		members = s.sum.members
	}
	if s.heir != nil {
		members = append(slices.Clone(s.heir.sources), s)
	}
	for _, m := range members {
		for _, c := range m.cells.between(from, to) {
			if !m.inForce(c.slot) {
				continue
			}
			for _, id := range m.eventIDs.of(c.slot) {
				if len(ids) == maxIDs {
					more++
					continue
				}
				ids = append(ids, id)
			}
		}
	}
	return ids, more
}
