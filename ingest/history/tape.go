package history

import (
	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/replay"
)

// tape adds a decoded row to the tape.
func (r *reader) tape(o *monitor.Observation, at monitor.Instant, line int, raw []byte) {
	derived := o.ID == "" && !o.Reading && !r.opts.NoDerivedIDs && (r.opts.KeepsIDs == nil || r.opts.KeepsIDs(o.Series))
	if derived {
		r.scratch = wire.EncodeObservation(r.scratch[:0], o)
		field := r.ids.next(r.scratch)
		o.ID = string(field[len(`"id":"`) : len(field)-len(`",`)])
		r.history.Counts.DerivedIDs++
	}
	r.history.Counts.Observations++
	r.latestHere = max(r.latestHere, at)
	place := replay.Place{File: r.path, Line: line}
	r.opts.Tape.Add(o, at, derived, false, place)
	r.remark(o.Series, raw, place)
}

// plainRows reads the rows that most files consist of, without the decoder: a
// known series, a date or a start and end, plain numbers. It remembers what
// the decoder said of every series, and the texts of the times read last.
type plainRows struct {
	t *table
	// The columns' places; -1 for none.
	series, date, start, end, events, exposure int
	// known are the series that a decoded row had, in the tape's numbers, and
	// follows is the series that came after each one.
	known   map[string]int32
	follows map[int32]int32
	last    int32
	from    readTime // of start, or of the date
	to      readTime // of end
}

// readTime is a text of a time, and what it was read as.
type readTime struct {
	text     []byte
	at, next monitor.Instant // next is the end of a date
}

// newPlainRows returns nil where rows hold more than counts over intervals.
func newPlainRows(t *table) *plainRows {
	if t.opts.Tape == nil || t.fixedSeries() {
		return nil
	}
	p := &plainRows{t: t, series: -1, date: -1, start: -1, end: -1, events: -1, exposure: -1, known: map[string]int32{}, follows: map[int32]int32{}, last: -1}
	places := map[string]*int{"series": &p.series, "date": &p.date, "start": &p.start, "end": &p.end, "events": &p.events, "exposure": &p.exposure}
	for i, c := range t.columns {
		place := places[c.name]
		switch {
		case c.kind == ignored:
		case place == nil:
			return nil
		default:
			*place = i
		}
	}
	byDate := p.date >= 0 && p.start < 0 && p.end < 0
	if !byDate && (p.date >= 0 || p.start < 0 || p.end < 0) {
		return nil
	}
	return p
}

func (t *table) fixedSeries() bool { return !t.has("series") }

// learn notes that the decoder takes rows of the series, and that they need no
// id.
func (p *plainRows) learn(item *monitor.Item) {
	if p == nil || item.Reason != "" {
		return
	}
	o := &item.Observation
	if keeps := p.t.opts.KeepsIDs; !p.t.opts.NoDerivedIDs && (keeps == nil || keeps(o.Series)) {
		return
	}
	if !o.HasExposure && p.exposure >= 0 && p.t.unit != "" {
		return // its unit was not looked at yet
	}
	p.known[o.Series] = p.t.opts.Tape.Number(o.Series)
}

// row reads the cells of a plain row; false leaves it to the decoder.
func (p *plainRows) row(line int) bool {
	if p == nil {
		return false
	}
	series, ok := p.seriesOf(p.t.cells[p.series])
	if !ok {
		return false
	}
	var counts plainCounts
	if !counts.read(p) {
		return false
	}
	start, end, ok := p.interval()
	if !ok {
		return false
	}
	r := p.t.reader
	r.history.Counts.Observations++
	r.latestHere = max(r.latestHere, end)
	r.opts.Tape.AddCounts(series, start, end, counts.events, counts.hasEvents, counts.exposure, counts.hasExposure, end, replay.Place{File: r.path, Line: line})
	return true
}

// seriesOf returns the number of a known series.
func (p *plainRows) seriesOf(name []byte) (int32, bool) {
	names := p.t.opts.Tape.Series()
	if next, ok := p.follows[p.last]; ok && string(name) == names[next] {
		p.last = next
		return next, true
	}
	number, ok := p.known[string(name)]
	if !ok {
		return 0, false
	}
	p.follows[p.last] = number
	p.last = number
	return number, true
}

func (p *plainRows) interval() (start, end monitor.Instant, ok bool) {
	zone := p.t.opts.Zone
	if p.date >= 0 {
		if cell := p.t.cells[p.date]; string(cell) != string(p.from.text) {
			start, end, err := span(string(cell), zone)
			if err != nil || start >= end {
				return 0, 0, false
			}
			p.from = readTime{append(p.from.text[:0], cell...), start, end}
		}
		return p.from.at, p.from.next, true
	}
	for _, x := range []struct {
		cell []byte
		to   *readTime
	}{{p.t.cells[p.start], &p.from}, {p.t.cells[p.end], &p.to}} {
		if string(x.cell) == string(x.to.text) {
			continue
		}
		at, err := moment(string(x.cell), zone)
		if err != nil || p.t.offsets.isNew(x.cell) {
			return 0, 0, false
		}
		*x.to = readTime{text: append(x.to.text[:0], x.cell...), at: at}
	}
	return p.from.at, p.to.at, p.from.at < p.to.at
}
