package replay

import (
	"cmp"
	"fmt"
	"slices"

	"tailbell/config"
	"tailbell/monitor"
)

// Remark is something about a row that was used all the same.
type Remark struct {
	Place
	Kind   RemarkKind
	Detail string
}

// String returns the remark on one line.
func (r Remark) String() string {
	return fmt.Sprintf("%s:%d: %s: %s", r.File, r.Line, r.Kind, r.Detail)
}

// RemarkKind is what a remark is about.
type RemarkKind string

// The kinds of remark.
const (
	Gap          RemarkKind = "gap"           // slots before the row lack a side
	Duplicate    RemarkKind = "duplicate"     // a row above says the same, or of the same time something else
	OutOfOrder   RemarkKind = "out_of_order"  // a row above became known later
	MixedOffsets RemarkKind = "mixed_offsets" // rows above have times with another offset
)

// RemarkKinds are all kinds, in order.
var RemarkKinds = []RemarkKind{Gap, Duplicate, OutOfOrder, MixedOffsets}

// mostRemarks is how many remarks of a kind are kept; all are counted.
const mostRemarks = 1000

// Remarks are what is odd about a tape.
type Remarks struct {
	List   []Remark
	Counts map[RemarkKind]int
}

func (x *Remarks) add(r Remark) {
	if x.Counts == nil {
		x.Counts = map[RemarkKind]int{}
	}
	if x.Counts[r.Kind]++; x.Counts[r.Kind] <= mostRemarks {
		x.List = append(x.List, r)
	}
}

// Remark notes what was odd about a row when it was read.
func (t *Tape) Remark(r Remark) { t.remarks.add(r) }

// Inspect looks for what is odd about the rows: gaps between the slots of a
// series (where the set-up needs a count or an exposure for each), rows that
// are there twice, rows that stand after later ones, and what was noted while
// they were read. In the order of files and lines.
func Inspect(setup *config.Setup, t *Tape) Remarks {
	found := Remarks{}
	for _, r := range t.remarks.List {
		found.add(r)
	}
	for kind, n := range t.remarks.Counts {
		found.Counts[kind] = n
	}
	in := &inspector{tape: t, remarks: &found, series: make([]inspected, len(t.names)), calendars: map[*config.Indicator]*monitor.Calendar{}}
	for i, name := range t.names {
		for k := range setup.Indicators {
			if x := &setup.Indicators[k]; x.Matches(name) {
				in.series[i].indicator = x
				break
			}
		}
	}
	in.rows()
	slices.SortStableFunc(found.List, func(a, b Remark) int {
		return cmp.Or(cmp.Compare(slices.Index(t.files, a.File), slices.Index(t.files, b.File)), cmp.Compare(a.Line, b.Line))
	})
	return found
}

// inspector goes through the rows as they were read.
type inspector struct {
	tape      *Tape
	remarks   *Remarks
	series    []inspected
	calendars map[*config.Indicator]*monitor.Calendar
	// bySeries are the rows by series, once they are asked for.
	bySeries [][]uint32
}

// inspected is what was seen of one series so far.
type inspected struct {
	indicator *config.Indicator
	rows      int
	end       monitor.Instant // the latest end of an interval
	// said holds the rows by their interval, once one did not come after all
	// others.
	said map[span][]int
	// sides are the slots that were told, of events and of exposure.
	sides [2]coverage
}

type span struct{ start, end monitor.Instant }

// rows looks at every row.
func (in *inspector) rows() {
	t := in.tape
	var latest *row
	for i := range t.n {
		r := t.raw(i)
		if latest != nil && r.time < latest.time {
			in.remarks.add(Remark{t.place(r), OutOfOrder, fmt.Sprintf("%s:%d became known later: the rows are put in order", t.files[latest.file], latest.line)})
		} else {
			latest = r
		}
		if r.kind != observation || r.flags&retracted != 0 {
			continue
		}
		s := &in.series[r.series]
		if s.rows++; s.rows > 1 && r.start < s.end && s.indicator != nil {
			in.duplicate(s, i)
		}
		s.end = max(s.end, r.end)
		if s.said != nil {
			s.said[span{r.start, r.end}] = append(s.said[span{r.start, r.end}], i)
		}
		if s.indicator != nil {
			in.cover(s, i)
		}
	}
	in.gaps()
}

// duplicate looks for an earlier row of the same interval.
func (in *inspector) duplicate(s *inspected, i int) {
	t := in.tape
	r := t.raw(i)
	if s.said == nil {
		s.said = map[span][]int{}
		for _, k := range in.rowsOf(r.series) {
			if int(k) >= i {
				break
			}
			x := t.raw(int(k))
			s.said[span{x.start, x.end}] = append(s.said[span{x.start, x.end}], int(k))
		}
	}
	for _, k := range s.said[span{r.start, r.end}] {
		x := t.raw(k)
		if x.flags&r.flags&sidesOnce(s.indicator) == 0 || t.revises(r, x) {
			continue // the other side, another event, or a correction
		}
		detail := "says the same of the same time"
		if x.events != r.events || x.exposure != r.exposure || x.digits != r.digits {
			detail = "says something else of the same time"
		}
		in.remarks.add(Remark{t.place(r), Duplicate, fmt.Sprintf("%s:%d %s; %s", t.files[x.file], x.line, detail, t.counting(r, x))})
		return
	}
}

// sidesOnce are the sides that an interval is told once: of events that are
// reported each by itself many may lie in one.
func sidesOnce(in *config.Indicator) uint8 {
	var sides uint8
	if in.Events == config.Counted {
		sides |= hasEvents
	}
	if in.Exposure != config.Clock {
		sides |= hasExposure
	}
	return sides
}

// rowsOf returns the observations of a series but retractions, in order.
func (in *inspector) rowsOf(series int32) []uint32 {
	t := in.tape
	if in.bySeries == nil {
		in.bySeries = make([][]uint32, len(t.names))
		for i := range t.n {
			if r := t.raw(i); r.kind == observation && r.flags&retracted == 0 {
				in.bySeries[r.series] = append(in.bySeries[r.series], uint32(i))
			}
		}
	}
	return in.bySeries[series]
}

// revises reports whether a row is a revision of the other.
func (t *Tape) revises(r, x *row) bool {
	if r.extra < 0 || x.extra < 0 {
		return false
	}
	a, b := &t.ids[r.extra], &t.ids[x.extra]
	return a.id == b.id && a.revision != b.revision
}

// counting says whether both rows count.
func (t *Tape) counting(r, x *row) string {
	if r.extra >= 0 && x.extra >= 0 && t.ids[r.extra].id == t.ids[x.extra].id {
		return "they have one id, and count once"
	}
	return "both count: give corrections an id and a revision"
}

// coverage is which slots were told: all from first to last but the holes.
type coverage struct {
	first, last int64
	any         bool
	holes       []hole
}

// hole is a run of slots before the one that a row tells.
type hole struct {
	from, to int64 // [from, to)
	row      int
}

// cover notes the slots that a row tells.
func (in *inspector) cover(s *inspected, i int) {
	r := in.tape.raw(i)
	cfg := s.indicator
	need := [2]bool{cfg.Events == config.Counted && r.flags&hasEvents != 0, cfg.Exposure == config.Reported && r.flags&hasExposure != 0}
	if !need[0] && !need[1] {
		return
	}
	cal := in.calendars[cfg]
	if cal == nil {
		cal = monitor.NewCalendar(cfg.Every, cfg.Zone)
		in.calendars[cfg] = cal
	}
	from := cal.Slot(r.begin())
	if r.flags&ofTotals != 0 { // what came up to then
		from = cal.Slot(r.end - 1)
	}
	to := from + 1
	if r.end > r.start+1 && r.end > cal.Start(to) {
		to = cal.Slot(r.end-1) + 1
	}
	for k := range need {
		if need[k] {
			s.sides[k].tell(from, to, i)
		}
	}
}

// tell notes that the slots [from, to) are told by a row.
func (c *coverage) tell(from, to int64, row int) {
	switch {
	case !c.any:
		*c = coverage{first: from, last: to, any: true}
		return
	case from > c.last:
		c.holes = append(c.holes, hole{c.last, from, row})
	case from < c.last && len(c.holes) > 0:
		c.fill(from, to)
	}
	if from < c.first { // rows that stand in no order: what lies between was not told yet
		if to < c.first {
			c.holes = append(c.holes, hole{to, c.first, row})
		}
		c.first = from
	}
	c.last = max(c.last, to)
}

// fill takes the slots out of the holes.
func (c *coverage) fill(from, to int64) {
	var rest []hole
	for _, h := range c.holes {
		if h.from < from {
			rest = append(rest, hole{h.from, min(h.to, from), h.row})
		}
		if h.to > to {
			rest = append(rest, hole{max(h.from, to), h.to, h.row})
		}
		if h.from >= from && h.to <= to {
			continue
		}
	}
	c.holes = rest
}

// gaps tells of the holes that are left.
func (in *inspector) gaps() {
	for n := range in.series {
		s := &in.series[n]
		for k, side := range []string{"events", "exposure"} {
			cal := in.calendars[s.indicator]
			for _, h := range s.sides[k].holes {
				if cal.Start(h.from) == cal.Start(h.to) {
					continue // a date that the zone skipped
				}
				in.remarks.add(Remark{in.tape.place(in.tape.raw(h.row)), Gap, in.gapText(s, n, side, h, cal)})
			}
		}
	}
}

func (in *inspector) gapText(s *inspected, n int, side string, h hole, cal *monitor.Calendar) string {
	zone := s.indicator.Zone
	layout := "2006-01-02"
	if s.indicator.Every.Unit == config.Minute || s.indicator.Every.Unit == config.Hour {
		layout = "2006-01-02 15:04"
	}
	from, to := cal.Start(h.from).Time().In(zone).Format(layout), cal.Start(h.to).Time().In(zone).Format(layout)
	slots := fmt.Sprintf("%d slots of %s, from %s until %s", h.to-h.from, s.indicator.Every, from, to)
	if h.to == h.from+1 {
		slots = fmt.Sprintf("the slot of %s from %s", s.indicator.Every, from)
	}
	return fmt.Sprintf("%s: no %s for %s: absent is not zero, and looks that need it are withheld", in.tape.names[n], side, slots)
}
