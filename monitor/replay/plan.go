package replay

import (
	"slices"

	"tailbell/config"
	"tailbell/monitor"
)

// A group holds few series, so that what its engine works on stays in the
// processor's cache; it does not depend on how many cores there are.
const (
	groupSeries = 24
	groupRows   = 400_000
)

// plan says how a tape is divided.
type plan struct {
	tape  *Tape
	setup *config.Setup
	// belongs is the indicator of each series, nil for none.
	belongs []*config.Indicator
	// whole says why the tape can't be divided; "" if it can.
	whole string
	// groups are the rows of each group, in order; of each series its group.
	groups  [][]uint32
	groupOf []int32
	// begin and end are the clock of the whole after its first and its last
	// row; Beginning if no row moves it.
	begin, end monitor.Instant
	// clocks are the clock of the whole before rows that it may refuse for
	// being too old.
	clocks map[uint32]monitor.Instant
	parent []int32 // of the series, while they are being linked
}

func newPlan(t *Tape, setup *config.Setup, whole bool) *plan {
	p := &plan{tape: t, setup: setup, begin: monitor.Beginning, end: monitor.Beginning, clocks: map[uint32]monitor.Instant{}}
	p.parent = make([]int32, len(t.names))
	p.belongs = make([]*config.Indicator, len(t.names))
	monitored := 0
	for i, name := range t.names {
		p.parent[i] = int32(i)
		for k := range setup.Indicators {
			if in := &setup.Indicators[k]; in.Matches(name) {
				p.belongs[i] = in
				monitored++
				break
			}
		}
	}
	if whole {
		p.whole = "asked for"
	}
	if monitored > setup.Limits.MaxSeries {
		p.whole = "there are more series than limits.max_series"
	}
	if slices.ContainsFunc(setup.Indicators, func(in config.Indicator) bool { return in.Remind > 0 }) {
		p.whole = "how often people are reminded depends on every move of the clock"
	}
	p.linkIndicators()
	p.linkIDs()
	p.clock()
	if p.whole == "" {
		p.divide()
	}
	return p
}

// linkIndicators keeps the series together that an indicator judges together.
func (p *plan) linkIndicators() {
	first := map[*config.Indicator]int32{}
	for i, in := range p.belongs {
		if in == nil || !judgesTogether(in) {
			continue
		}
		if f, ok := first[in]; ok {
			p.link(f, int32(i))
		} else {
			first[in] = int32(i)
		}
	}
}

func judgesTogether(in *config.Indicator) bool {
	return in.Allowance != nil || len(in.Sums) > 0 || slices.ContainsFunc(in.Baselines, func(b config.Baseline) bool { return b.Kind == config.Peers })
}

// linkIDs keeps the series together that share an id.
func (p *plan) linkIDs() {
	if len(p.tape.ids) == 0 && len(p.tape.acts) == 0 {
		return
	}
	type key struct{ site, id string }
	first := map[key]int32{}
	for i := range p.tape.n {
		r := p.tape.raw(i)
		if r.kind == act {
			if p.tape.acts[r.extra].Alert != "" {
				p.whole = "an act names its alert by the id"
			}
			continue
		}
		if r.kind != observation || r.extra < 0 || p.tape.ids[r.extra].derived {
			continue // a derived id holds the series
		}
		k := key{site(p.tape.names[r.series]), p.tape.ids[r.extra].id}
		if f, ok := first[k]; ok {
			p.link(f, r.series)
		} else {
			first[k] = r.series
		}
	}
}

func (p *plan) root(i int32) int32 {
	for p.parent[i] != i {
		p.parent[i] = p.parent[p.parent[i]]
		i = p.parent[i]
	}
	return i
}

// link joins two series; the first of them in order stands for both.
func (p *plan) link(a, b int32) {
	a, b = p.root(a), p.root(b)
	p.parent[max(a, b)] = min(a, b)
}

// moves says whether a row moves the clock of the whole.
type moves int

const (
	never moves = iota
	always
	perhaps
)

// clock finds the clock of the whole where a group can't know it from its own
// rows.
func (p *plan) clock() {
	calendars := map[*config.Indicator]*monitor.Calendar{}
	isLive := false
	for i := range p.tape.n {
		r := p.tape.row(i)
		isLive = isLive || r.kind == live
		m, told := p.moves(r, calendars, isLive)
		switch {
		case m == perhaps && p.whole == "":
			p.whole = "a row with an id lies beyond the horizon of its time"
		case told:
			p.clocks[uint32(i)] = p.end
		}
		if m == always {
			if p.begin == monitor.Beginning {
				p.begin = r.time
			}
			p.end = max(p.end, r.time)
		}
	}
}

// moves says whether the row moves the clock, and whether it may be refused at
// a clock that it did not move.
func (p *plan) moves(r *row, calendars map[*config.Indicator]*monitor.Calendar, isLive bool) (m moves, told bool) {
	if r.kind != observation || isLive {
		return always, false
	}
	in := p.belongs[r.series]
	switch {
	case in == nil: // one whose id belonged to a monitored series may be refused
		return never, r.extra >= 0
	case r.flags&retracted != 0 || r.begin() > r.time.Add(-in.Horizon):
		return always, false
	}
	cal := calendars[in]
	if cal == nil {
		cal = monitor.NewCalendar(in.Every, in.Zone)
		calendars[in] = cal
	}
	switch {
	case cal.Start(cal.Slot(r.begin())+1) >= r.time.Add(-in.Horizon):
		return always, false
	case r.extra >= 0 && !p.tape.ids[r.extra].derived:
		return perhaps, true
	}
	return never, true
}

// divide gives every series a group, and every group its rows.
func (p *plan) divide() {
	rows := make([]int, len(p.parent))
	for s, n := range p.tape.counts {
		rows[p.root(int32(s))] += n
	}
	members := make([]int, len(p.parent))
	for i := range p.parent {
		members[p.root(int32(i))]++
	}
	p.groupOf = make([]int32, len(p.parent))
	var sizes []int
	inGroup, rowsIn := groupSeries, 0
	for i := range p.parent {
		root := p.root(int32(i))
		if root != int32(i) {
			p.groupOf[i] = p.groupOf[root] // a root stands before its members
			continue
		}
		if inGroup+members[i] > groupSeries || rowsIn+rows[i] > groupRows {
			sizes = append(sizes, 0)
			inGroup, rowsIn = 0, 0
		}
		inGroup, rowsIn = inGroup+members[i], rowsIn+rows[i]
		p.groupOf[i] = int32(len(sizes) - 1)
		sizes[len(sizes)-1] += rows[i]
	}
	p.groups = make([][]uint32, max(len(sizes), 1))
	for g, n := range sizes {
		p.groups[g] = make([]uint32, 0, n)
	}
	for i := range p.tape.n {
		switch r := p.tape.row(i); {
		case r.series >= 0:
			g := p.groupOf[r.series]
			p.groups[g] = append(p.groups[g], uint32(i))
		case r.kind == act:
			p.groups[0] = append(p.groups[0], uint32(i))
		default: // a tick is everybody's
			for g := range p.groups {
				p.groups[g] = append(p.groups[g], uint32(i))
			}
		}
	}
}

// site is the leading part of a series' name, under which ids are unique.
func site(series string) string {
	for i := range len(series) {
		if series[i] == '/' {
			return series[:i]
		}
	}
	return series
}
