package monitor

import (
	"cmp"
	"math"
	"slices"
	"strings"

	"tailbell/config"
)

// gathering is how sums come about whose members may lie in several partitions.
// Changes of members reach them at the boundaries at which the indicator looks,
// all together: at each, every partition tells what changed there (a summary),
// and when all have, the partition that gathers sums it up and looks. With one
// partition that happens as soon as the boundary falls due, without a message,
// and comes to the same.
type gathering struct {
	// sums is the indicator as it looks at its gathered sums: it goes from
	// boundary to boundary by itself. It is nil in a partition that only tells.
	sums *indicator
	// life tells apart the summaries of an indicator that came, went and came
	// again: the digest of the set-up that brought it.
	life string
	// begun says that this partition has told of a boundary.
	begun bool
	// due are the members that have news.
	due []*series
	// mirrors are, where there are several partitions, the members as they were
	// at the latest boundary gathered, by name.
	mirrors map[string]*series
	// inbound is what came from the partitions, nil where there is only one.
	inbound *inbound
}

// tiding is what is known of a member at a boundary: the slots that changed.
type tiding struct {
	member   *series
	from, to int64
	head     bool
	why      string
}

// gathers reports whether the engine gathers the sums of an indicator.
func (e *Engine) gathers(indicator string) bool {
	return e.partition.Of <= 1 || config.PartitionOf(indicator, 0, e.partition.Of) == e.partition.Number
}

// prepare lets an indicator gather its sums, if it has such.
func (e *Engine) prepare(ix *indicator, life string) {
	if len(ix.cfg.Gathered(e.partition.KeyParts)) == 0 {
		return
	}
	g := &gathering{life: life}
	ix.gathering = g
	if !e.gathers(ix.cfg.Name) {
		return
	}
	g.sums = newIndicator(ix.index, ix.cfg)
	g.sums.of = ix
	if e.partition.Of > 1 {
		g.mirrors = map[string]*series{}
		g.inbound = e.inboundOf(ix.cfg.Name, life)
	}
}

// kin are the indicator and, where it gathers sums, the one that looks at those.
func (ix *indicator) kin() []*indicator {
	root := ix
	if ix.of != nil {
		root = ix.of
	}
	if g := root.gathering; g != nil && g.sums != nil {
		return []*indicator{root, g.sums}
	}
	return []*indicator{root}
}

// idle reports whether the indicator has no series to look at when it is due.
func (e *Engine) idle(ix *indicator) bool {
	g := ix.gathering
	return len(ix.series) == 0 && (g == nil || e.partition.Of > 1 || len(g.sums.series) == 0)
}

// alone reports whether the indicator gathers sums of this partition only.
func (e *Engine) alone(ix *indicator) bool { return ix.gathering != nil && e.partition.Of <= 1 }

// began lets the sums of an indicator follow that counts boundaries as looked at
// up to the latest, and tells what there is to count.
func (e *Engine) began(ix *indicator) {
	switch g := ix.gathering; {
	case g == nil:
	case e.alone(ix):
		g.sums.started = true
		g.sums.pass(ix.looked)
		e.beginCounts(g.sums)
	default:
		e.summarise(ix, ix.looked)
		if g.inbound != nil {
			e.gatherReady(g)
		}
	}
	e.beginCounts(ix)
}

// bring hands on what members have to tell at a boundary that is about to be
// looked at.
func (e *Engine) bring(ix *indicator, boundary int64) {
	switch {
	case ix.gathering == nil:
	case e.alone(ix):
		e.gather(ix.gathering, boundary, e.tidings(ix, boundary))
	default:
		e.summarise(ix, boundary)
	}
}

// list puts a member among those that have news.
func (g *gathering) list(s *series) {
	if !s.news.listed {
		s.news.listed = true
		g.due = append(g.due, s)
	}
}

// tidings returns what members have to tell at the boundary, in order of their
// names. Those that changed a slot which has not ended by then stay listed.
func (e *Engine) tidings(ix *indicator, boundary int64) []tiding {
	g := ix.gathering
	var list []tiding
	stay := g.due[:0]
	slices.SortFunc(g.due, func(a, b *series) int { return cmp.Compare(a.name, b.name) })
	for _, s := range g.due {
		if s.retired {
			continue
		}
		n := s.news
		if s.refreshNews(); n.since == maxBoundary { // there was no boundary yet
			n.since, n.to = boundary-1, max(n.to, boundary-1)
			e.touch(s)
		}
		if n.head || n.from < boundary && n.from <= n.to {
			list = append(list, tiding{s, n.from, min(n.to, boundary-1), n.head, n.why})
		}
		if n.listed = n.to >= boundary; n.listed {
			stay = append(stay, s)
		}
	}
	clear(g.due[len(stay):])
	g.due = stay
	return list
}

// gather carries what members brought into the sums at a boundary, before it is
// looked at, and makes the looks again that it changes. The list is in order of
// the members' names.
func (e *Engine) gather(g *gathering, boundary int64, list []tiding) {
	up := g.sums
	defer e.asOf(up.due(boundary))()
	for i := range list {
		e.joinGathered(g, list[i].member)
	}
	touched := up.touchedBy(list, boundary)
	var changes []change
	for _, sum := range up.sums { // in order of their numbers
		if t := touched[sum]; t != nil {
			changes = e.changeSum(changes[:0], sum, t.from, t.to)
			e.because = t.why
			e.rerun(changes[0])
		}
	}
	e.because = ""
	e.enforceLater(up)
	e.settleAllOf(up)
}

// touchedBy returns which slots before the one that ends at the boundary change
// in the sums. That one is summed whole.
func (ix *indicator) touchedBy(list []tiding, boundary int64) map[*series]*tiding {
	touched := map[*series]*tiding{}
	for _, t := range list {
		to := t.to
		if t.from <= to {
			to = ix.carriedTo(&change{series: t.member, from: t.from, to: t.to})
		}
		if !t.head && t.from >= boundary-1 {
			continue
		}
		for _, sum := range t.member.news.sums {
			old := touched[sum]
			if old == nil {
				touched[sum] = &tiding{sum, t.from, to, t.head, t.why}
				continue
			}
			if old.why != t.why {
				old.why = ""
			}
			old.from, old.to = min(old.from, t.from), max(old.to, to)
		}
	}
	return touched
}

// asOf sets the clock to a moment at which sums are gathered, and returns what
// sets it back.
func (e *Engine) asOf(moment Instant) (back func()) {
	clock := e.clock
	e.clock, e.gathered = moment, moment
	return func() { e.clock, e.gathered = clock, Never }
}

// joinGathered makes the series a member of its gathered sums, which are made
// where they are missing.
func (e *Engine) joinGathered(g *gathering, s *series) {
	up := g.sums
	for rule, m := range up.cfg.Sums {
		if !m.Gathered(e.partition.KeyParts) {
			continue
		}
		name, ok := m.NameFor(s.name)
		if !ok {
			continue
		}
		sum := e.byName[name]
		if sum == nil {
			sum = e.enter(up, name)
		}
		e.linkGathered(up, sum, rule, s)
	}
}

// linkGathered links a gathered sum and a member; members are in order of their
// names.
func (e *Engine) linkGathered(up *indicator, sum *series, rule int, s *series) {
	if sum.sum == nil {
		sum.sum = &rollup{rule: rule}
		i, _ := slices.BinarySearchFunc(up.sums, sum.number, func(x *series, n uint32) int { return cmp.Compare(x.number, n) })
		up.sums = slices.Insert(up.sums, i, sum) // a number may have been another's
	}
	i, known := slices.BinarySearchFunc(sum.sum.members, s.name, func(m *series, name string) int { return strings.Compare(m.name, name) })
	if !known { // two rules may come to the same
		sum.sum.members = slices.Insert(sum.sum.members, i, s)
		s.news.sums = append(s.news.sums, sum)
	}
}

// relinkGathered links gathered sums and members again after they were restored.
func (e *Engine) relinkGathered(g *gathering, members []*series) {
	for _, s := range members {
		if s.news == nil || s.birth == unborn && !s.mirror {
			continue
		}
		for rule, m := range g.sums.cfg.Sums {
			if name, ok := m.NameFor(s.name); ok && m.Gathered(e.partition.KeyParts) {
				if sum := e.byName[name]; sum != nil {
					e.linkGathered(g.sums, sum, rule, s)
				}
			}
		}
	}
	up := g.sums
	for _, sum := range up.sums {
		if sum.unsummed && sum.birth != unborn && up.started {
			up.resum(sum, sum.birth, up.looked-1)
			sum.fresh = true
			e.touch(sum)
		}
	}
}

// lookGathered makes the looks at the gathered sums that fall due at a boundary.
func (e *Engine) lookGathered(up *indicator, boundary int64) {
	defer e.asOf(up.due(boundary))()
	up.started = true
	due := up.due(boundary)
	up.pass(boundary)
	for _, sum := range up.sums {
		e.touch(sum)
	}
	e.lookEach(up, boundary, due)
}

// isGathered reports whether the series is a gathered sum.
func (s *series) isGathered() bool { return s.indicator != nil && s.indicator.of != nil && !s.mirror }

// resumed notes that a slot of a sum was summed anew. Those of gathered sums are
// stored: what members hold has moved on since.
func (s *series) resumed(slot int64) {
	s.changed(slot)
	if s.isGathered() {
		if n := len(s.dirty); n == 0 || s.dirty[n-1] != slot {
			s.dirty = append(s.dirty, slot)
		}
	}
}

// gatheredHeader is how far the gathering of an indicator has come, as stored.
type gatheredHeader struct {
	Life  string           `json:"life"`
	Begun bool             `json:"begun,omitempty"`
	Sums  *indicatorHeader `json:"sums,omitempty"`
}

func (g *gathering) header(name string) *gatheredHeader {
	if g == nil {
		return nil
	}
	h := &gatheredHeader{Life: g.life, Begun: g.begun}
	if up := g.sums; up != nil {
		h.Sums = &indicatorHeader{Name: name, Started: up.started, Looked: up.looked, Frozen: up.frozenAt}
		h.Sums.encodePlaces(up)
	}
	return h
}

// restoreGathering restores how far the gathering of the indicator had come. A
// store that was written before sums were gathered stands where the indicator
// does.
func (e *Engine) restoreGathering(ix *indicator, h *gatheredHeader, setups map[int]*config.Setup) error {
	life := ""
	if h != nil {
		life = h.Life
	}
	e.prepare(ix, life)
	g := ix.gathering
	if g == nil {
		return nil
	}
	if h != nil {
		g.begun = h.Begun
	}
	switch {
	case g.sums == nil:
	case h == nil || h.Sums == nil:
		up := g.sums
		up.epochs, up.places, up.started = slices.Clone(ix.epochs), ix.places, ix.started
		up.frozenAt, up.kept, up.floor = ix.frozenAt, ix.kept, ix.floor
		up.since = up.epochs[len(up.epochs)-1].from
		if ix.started {
			up.pass(ix.looked)
		}
	default:
		up, err := restoreIndicator(ix.index, *h.Sums, setups)
		if err != nil {
			return err
		}
		up.of, up.places = ix, ix.places
		ep := &up.epochs[0]
		if h.Sums.Started {
			ep = up.epochAt(h.Sums.Looked + 1)
		}
		up.cfg, up.since = ep.cfg, ep.from
		up.resume(h.Sums)
		g.sums = up
	}
	return nil
}

// overlayGathered puts a gathered sum under the indicator that looks at such. One
// that was stored before sums were gathered has no cells of its own: it is summed
// once more from its members, as it always was.
func (e *Engine) overlayGathered(s *series, flags byte) {
	ix := s.indicator
	if ix == nil || ix.gathering == nil || ix.gathering.sums == nil || !config.IsSum(s.name) {
		return
	}
	old := slices.ContainsFunc(ix.cfg.Gathered(e.partition.KeyParts), func(m config.Sum) bool { return m.Makes(s.name) })
	if flags&flagGathered != 0 || old {
		s.indicator = ix.gathering.sums
	}
	s.unsummed = flags&flagGathered == 0 && old
}

// maxBoundary is beyond every boundary.
const maxBoundary = math.MaxInt64
