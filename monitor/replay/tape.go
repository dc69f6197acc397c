package replay

import (
	"cmp"
	"iter"
	"slices"

	"tailbell/config"
	"tailbell/monitor"
)

// Tape is a recorded history. The zero value is empty. Rows are added in any
// order and sorted by Sort.
type Tape struct {
	names  []string
	counts []int // rows by series
	number map[string]int32
	// rows lie in pieces, so that growing copies nothing.
	rows [][]row
	n    int
	// order numbers the rows by time; nil while they were added in it.
	order  []uint32
	latest monitor.Instant
	late   int
	ids    []identity
	acts   []monitor.Act
	files  []string
	// remarks are those noted while the rows were read.
	remarks Remarks
}

const (
	pieceBits = 14
	pieceRows = 1 << pieceBits
)

type kind uint8

const (
	observation kind = iota
	act
	tick
	live
)

// flags of an observation.
const (
	hasEvents uint8 = 1 << iota
	hasExposure
	hasReported
	retracted
	instant
	stored // it came after history time: its time is the bus's
	ofTotals
	hasSince // start is since when
)

// row is one row of the tape.
type row struct {
	time, start, end monitor.Instant
	events           int64
	exposure         uint64
	series           int32
	// extra is the number of an identity, or of an act; -1 for none.
	extra  int32
	line   uint32
	file   int16
	digits uint8
	flags  uint8
	kind   kind
}

type identity struct {
	id       string
	revision int64
	// derived says that the id was made from the row's content.
	derived bool
}

// Place is where a row stands: the line of a file, or the position in a
// stream.
type Place struct {
	File string
	Line int
}

// Len returns the number of rows.
func (t *Tape) Len() int { return t.n }

// Series returns the names of the series, in order of their first row.
func (t *Tape) Series() []string { return t.names }

// OutOfOrder is how many rows were added after a later one.
func (t *Tape) OutOfOrder() int { return t.late }

// Number returns the number of a series, which it has from now on.
func (t *Tape) Number(name string) int32 {
	if n, ok := t.number[name]; ok {
		return n
	}
	if t.number == nil {
		t.number = map[string]int32{}
	}
	n := int32(len(t.names))
	t.names, t.counts = append(t.names, name), append(t.counts, 0)
	t.number[name] = n
	return n
}

// NumberOf is Number for bytes; it allocates only for a new name.
func (t *Tape) NumberOf(name []byte) int32 {
	if n, ok := t.number[string(name)]; ok {
		return n
	}
	return t.Number(string(name))
}

// Add records an observation that became known at the time; Stored says that
// the time is the bus's, after history time. Derived says that its id was made
// from its content.
func (t *Tape) Add(o *monitor.Observation, at monitor.Instant, derived, afterHistory bool, p Place) {
	r := row{
		time: at, start: o.Start, end: o.End, events: o.Events, exposure: o.Exposure.Coef,
		digits: o.Exposure.Digits, series: t.Number(o.Series), extra: -1,
	}
	for flag, set := range map[uint8]bool{
		hasEvents: o.HasEvents, hasExposure: o.HasExposure, hasReported: o.HasReported,
		retracted: o.Retracted, instant: o.Instant, stored: afterHistory, ofTotals: o.Reading, hasSince: o.HasSince,
	} {
		if set {
			r.flags |= flag
		}
	}
	if o.HasSince { // what is read at an instant begins where it ends
		r.start = o.Since
	}
	if o.ID != "" {
		r.extra = int32(len(t.ids))
		t.ids = append(t.ids, identity{o.ID, o.Revision, derived})
	}
	t.add(r, p)
}

// AddCounts records the plain observation of a series, given by its number,
// over an interval: what most rows are.
func (t *Tape) AddCounts(series int32, start, end monitor.Instant, events int64, withEvents bool, exposure config.Decimal, withExposure bool, at monitor.Instant, p Place) {
	r := row{time: at, start: start, end: end, events: events, exposure: exposure.Coef, digits: exposure.Digits, series: series, extra: -1}
	if withEvents {
		r.flags |= hasEvents
	}
	if withExposure {
		r.flags |= hasExposure
	}
	t.add(r, p)
}

// AddAct records an act.
func (t *Tape) AddAct(a monitor.Act, at monitor.Instant, afterHistory bool, p Place) {
	r := row{time: at, kind: act, extra: int32(len(t.acts)), series: -1}
	if afterHistory {
		r.flags = stored
	}
	if a.Series != "" {
		r.series = t.Number(a.Series)
	}
	t.acts = append(t.acts, a)
	t.add(r, p)
}

// AddTick records that nothing came until then; with goesLive that history
// time ends there.
func (t *Tape) AddTick(at monitor.Instant, goesLive bool) {
	r := row{time: at, kind: tick, series: -1, extra: -1}
	if goesLive {
		r.kind = live
	}
	t.add(r, Place{})
}

func (t *Tape) add(r row, p Place) {
	if n := len(t.files); n == 0 || t.files[n-1] != p.File {
		t.files = append(t.files, p.File)
	}
	r.file, r.line = int16(len(t.files)-1), uint32(p.Line)
	if t.n == 0 {
		t.latest = r.time
	}
	if r.series >= 0 {
		t.counts[r.series]++
	}
	if r.time < t.latest {
		t.late++
	}
	t.latest = max(t.latest, r.time)
	if t.n&(pieceRows-1) == 0 {
		t.rows = append(t.rows, make([]row, 0, pieceRows))
	}
	last := &t.rows[len(t.rows)-1]
	*last = append(*last, r)
	t.n++
}

// begin is where the interval begins that the row is of.
func (r *row) begin() monitor.Instant {
	if r.flags&hasSince != 0 {
		return r.end
	}
	return r.start
}

func (t *Tape) raw(i int) *row { return &t.rows[i>>pieceBits][i&(pieceRows-1)] }

// row returns the i-th row in the order of time.
func (t *Tape) row(i int) *row {
	if t.order != nil {
		i = int(t.order[i])
	}
	return t.raw(i)
}

// Sort puts the rows in the order of their times; rows of the same time keep
// theirs.
func (t *Tape) Sort() {
	if t.late == 0 || t.order != nil && len(t.order) == t.n {
		return
	}
	t.order = make([]uint32, t.n)
	for i := range t.order {
		t.order[i] = uint32(i)
	}
	slices.SortStableFunc(t.order, func(a, b uint32) int { return cmp.Compare(t.raw(int(a)).time, t.raw(int(b)).time) })
}

// Place returns where the row with this position in the replayed stream
// stands; false if it is none.
func (t *Tape) Place(position uint64) (Place, bool) {
	if position < positionOf(0) || position >= positionOf(t.n) {
		return Place{}, false
	}
	return t.place(t.row(int(position-positionOf(0)) / 2)), true
}

func (t *Tape) place(r *row) Place { return Place{t.files[r.file], int(r.line)} }

// Times returns when the first and the last row became known; false of an
// empty tape. The tape must be sorted.
func (t *Tape) Times() (first, last monitor.Instant, ok bool) {
	if t.n == 0 {
		return 0, 0, false
	}
	return t.row(0).time, t.row(t.n - 1).time, true
}

// Last returns where the row stands that became known last.
func (t *Tape) Last() (Place, monitor.Instant) {
	r := t.row(t.n - 1)
	return t.place(r), r.time
}

// The positions of the replayed stream: the set-up, and the rows, with room
// before each for a tick that tells a group the clock of the whole.
const settingAt = 1

func positionOf(i int) uint64 { return 2*uint64(i) + 3 }

// fill makes the message of the i-th row. It uses the message's item again.
func (t *Tape) fill(m *monitor.Message, i int) {
	r := t.row(i)
	m.Position = positionOf(i)
	m.Time, m.Stored, m.HasTime = r.time, r.time, r.flags&stored == 0
	switch r.kind {
	case act:
		m.Kind, m.Act = monitor.ActMessage, t.acts[r.extra]
		return
	case tick:
		m.Kind = monitor.Tick
		return
	case live:
		m.Kind = monitor.Live
		return
	case observation:
	}
	m.Kind = monitor.Observations
	o := &m.Items[0].Observation
	o.Series, o.Start, o.End, o.Events = t.names[r.series], r.start, r.end, r.events
	o.Exposure = config.Decimal{Coef: r.exposure, Digits: r.digits}
	o.HasEvents, o.HasExposure = r.flags&hasEvents != 0, r.flags&hasExposure != 0
	o.Retracted, o.Instant = r.flags&retracted != 0, r.flags&instant != 0
	o.Reading, o.HasSince, o.Since = r.flags&ofTotals != 0, r.flags&hasSince != 0, 0
	if o.HasSince {
		o.Start, o.Since = r.end, r.start
	}
	o.ID, o.Revision, o.HasReported, o.Reported = "", 0, r.flags&hasReported != 0, 0
	if o.HasReported {
		o.Reported = r.time
	}
	if r.extra >= 0 {
		o.ID, o.Revision = t.ids[r.extra].id, t.ids[r.extra].revision
	}
}

// Messages returns the rows as an engine would get them after a set-up at
// position 1. A message is good until the next one.
func (t *Tape) Messages() iter.Seq[*monitor.Message] {
	return func(yield func(*monitor.Message) bool) {
		m := monitor.Message{Items: make([]monitor.Item, 1)}
		for i := range t.n {
			if t.fill(&m, i); !yield(&m) {
				return
			}
		}
	}
}
