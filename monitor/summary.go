package monitor

import (
	"cmp"
	"encoding/binary"
	"errors"
	"fmt"
	"slices"
	"strings"

	"tailbell/config"
)

// Summary says what changed in one partition, up to a boundary of an indicator,
// in the series that gathered sums may sum: a message from the partition
// to the one that gathers them, in one part or several. Or it says what the partition
// counted there, to every other one.
type Summary struct {
	Partition int
	Indicator string
	// life is that of the indicator, see gathering.
	life string
	// begins says that nothing was told before, ends that nothing will be after.
	begins, ends bool
	// It covers the boundaries after one, through another; what rows say is as
	// of the latter. More parts of the same follow, part is the number of this
	// one.
	after, through int64
	part           int
	more           bool
	rows           []summaryRow
	// count is set where it is what the partition counted.
	count *count
	// number tells those apart that wait for others.
	number uint64
	data   []byte
}

// summaryRow says of one series what changed. A series may have several.
type summaryRow struct {
	name string
	why  string
	// from and to bound the slots that changed.
	from, to int64
	// head says that birth and dates follow.
	head  bool
	birth int64
	dates *dates
	cells []cell
	ids   [][]string
}

const (
	summaryVersion = 1
	// summaryBytes is about how large a part is.
	summaryBytes = 64 << 10
	// rowCells is the most cells in a row.
	rowCells = 256
)

// LargestSummary is the most bytes that a message with a summary has.
const LargestSummary = 1 << 20

// ErrSummary is wrapped by every error of DecodeSummary.
var ErrSummary = errors.New("not a summary of a partition")

// parts cuts the summary into messages.
func (s *Summary) parts() []Summary {
	if s.count != nil {
		return s.countParts()
	}
	whole := *s
	whole.rows = nil
	var parts []Summary
	next, size := whole, 0
	for i := range s.rows {
		n := s.rows[i].size()
		if size > 0 && size+n > summaryBytes {
			next.more = true
			parts = append(parts, next)
			next, size = whole, 0
			next.part = len(parts)
		}
		next.rows, size = append(next.rows, s.rows[i]), size+n
	}
	return append(parts, next)
}

// size is about how many bytes the row takes.
func (r *summaryRow) size() int {
	n := len(r.name) + len(r.why) + 32 + 40*len(r.cells)
	for _, ids := range r.ids {
		for _, id := range ids {
			n += len(id) + 2
		}
	}
	if d := r.dates; d != nil {
		n += 20 * (len(d.turns) + len(d.outs) + len(d.signed[0]) + len(d.signed[1]))
	}
	return n
}

const (
	summaryBegins = 1
	summaryEnds   = 2
	summaryMore   = 4
	rowHead       = 1
	rowDates      = 2
)

// encode writes the summary: integers are varints, texts and lists are prefixed
// by length.
func (s *Summary) encode() []byte {
	if s.count != nil {
		return s.encodeCount()
	}
	b := []byte{summaryVersion, flag(s.begins) | flag(s.ends)<<1 | flag(s.more)<<2}
	b = s.encodeHead(b)
	b = binary.AppendUvarint(b, uint64(len(s.rows)))
	for i := range s.rows {
		b = s.rows[i].encode(b)
	}
	return b
}

// encodeHead writes whose summary it is, and from where to where.
func (s *Summary) encodeHead(b []byte) []byte {
	b = binary.AppendUvarint(b, uint64(s.Partition))
	b = appendString(appendString(b, s.Indicator), s.life)
	b = binary.AppendVarint(b, s.after)
	b = binary.AppendVarint(b, s.through)
	return binary.AppendUvarint(b, uint64(s.part))
}

func (r *summaryRow) encode(b []byte) []byte {
	b = appendString(b, r.name)
	b = append(b, flag(r.head)|flag(r.dates != nil)<<1)
	b = appendString(b, r.why)
	b = binary.AppendVarint(b, r.from)
	b = binary.AppendVarint(b, r.to)
	if r.head {
		b = binary.AppendVarint(b, r.birth)
	}
	if r.dates != nil {
		b = r.dates.encode(b)
	}
	b = binary.AppendUvarint(b, uint64(len(r.cells)))
	for i := range r.cells {
		c := &r.cells[i]
		b = binary.AppendVarint(b, c.slot)
		b = binary.AppendVarint(b, c.events)
		b = binary.AppendUvarint(b, c.exposure.Hi)
		b = binary.AppendUvarint(b, c.exposure.Lo)
		b = binary.AppendUvarint(b, uint64(c.saysEvents))
		b = binary.AppendUvarint(b, uint64(c.saysExposure))
		b = append(binary.AppendVarint(b, c.late), flag(c.revised))
		b = binary.AppendUvarint(b, uint64(len(r.ids[i])))
		for _, id := range r.ids[i] {
			b = appendString(b, id)
		}
	}
	return b
}

// encode writes what a gathered sum must know of the dates of a member.
func (d *dates) encode(b []byte) []byte {
	b = binary.AppendUvarint(b, uint64(len(d.turns)))
	for _, t := range d.turns {
		b = append(binary.AppendVarint(b, t.slot), flag(t.open)|flag(t.heir)<<1)
	}
	for _, l := range []spans{d.outs, d.signed[0], d.signed[1]} {
		b = binary.AppendUvarint(b, uint64(len(l)))
		for _, x := range l {
			b = binary.AppendVarint(binary.AppendVarint(b, x.from), x.to)
		}
	}
	return b
}

// encodeAll writes all that is known of the dates of a gathered sum, or that there
// are none.
func (d *dates) encodeAll(b []byte) []byte {
	if b = append(b, flag(d != nil)); d == nil {
		return b
	}
	b = binary.AppendUvarint(b, uint64(len(d.cuts)))
	for _, c := range d.cuts {
		b = binary.AppendVarint(binary.AppendVarint(b, c.slot), int64(c.after))
	}
	return d.encode(b)
}

func (r *reader) allDates() *dates {
	if !r.flag() {
		return nil
	}
	var cuts []cut
	for range r.length() {
		cuts = append(cuts, cut{r.int(), Instant(r.int())})
	}
	d := r.dates()
	d.cuts = cuts
	return d
}

func (r *reader) dates() *dates {
	d := &dates{}
	for range r.length() {
		slot, bits := r.int(), r.byte()
		d.turns = append(d.turns, turn{slot: slot, open: bits&1 != 0, heir: bits&2 != 0})
	}
	for _, l := range []*spans{&d.outs, &d.signed[0], &d.signed[1]} {
		for range r.length() {
			*l = append(*l, slots{r.int(), r.int()})
		}
	}
	return d
}

// DecodeSummary reads a summary. The error is an ErrSummary.
func DecodeSummary(data []byte) (*Summary, error) {
	if len(data) > LargestSummary {
		return nil, fmt.Errorf("%w: it has %d bytes, the limit is %d", ErrSummary, len(data), LargestSummary)
	}
	r := &reader{b: data}
	version := r.byte()
	if r.err == nil && version != summaryVersion && version != countVersion {
		return nil, fmt.Errorf("%w: version %d, known are %d and %d: run the same program in all processes", ErrSummary, version, summaryVersion, countVersion)
	}
	bits := r.byte()
	s := &Summary{begins: bits&summaryBegins != 0, ends: bits&summaryEnds != 0, more: bits&summaryMore != 0, data: data}
	partition := r.uint()
	s.Indicator, s.life = r.string(), r.string()
	s.after, s.through = r.int(), r.int()
	part := r.uint()
	if version == countVersion {
		s.count = r.count(bits)
	} else {
		for range r.length() {
			s.rows = append(s.rows, r.summaryRow())
		}
	}
	s.Partition, s.part = int(min(partition, 1<<20)), int(min(part, 1<<20))
	switch {
	case len(r.b) > 0:
		r.fail("bytes are left over")
	case partition >= 1<<20 || part >= 1<<20:
		r.fail("a number is too large")
	case s.after > s.through || s.through == maxBoundary || s.through == never:
		r.fail("it ends before it begins")
	case s.Indicator == "" || slices.ContainsFunc(s.rows, func(r summaryRow) bool { return config.CheckSeries(r.name) != nil }):
		r.fail("a name is no name")
	case s.ends && (s.more || len(s.rows) > 0 || s.count != nil && len(s.count.Pools) > 0):
		r.fail("it says more than that it ends")
	}
	if r.err != nil {
		return nil, fmt.Errorf("%w: %w", ErrSummary, r.err)
	}
	return s, nil
}

func (r *reader) summaryRow() summaryRow {
	row := summaryRow{name: r.string()}
	bits := r.byte()
	row.head = bits&rowHead != 0
	row.why = r.string()
	row.from, row.to = r.int(), r.int()
	if row.head {
		row.birth = r.int()
	}
	if bits&rowDates != 0 {
		row.dates = r.dates()
	}
	for range r.length() {
		c := cell{slot: r.int(), events: r.int(), exposure: r.quantity(), saysEvents: uint32(r.uint()), saysExposure: uint32(r.uint()), late: r.int()}
		c.revised = r.flag()
		if c.events < 0 || c.events > maxEvents || c.late < 0 || c.slot < -maxSlot || c.slot > maxSlot {
			r.fail("a count is out of range")
		}
		row.cells, row.ids = append(row.cells, c), append(row.ids, r.ids())
	}
	return row
}

// maxSlot is farther than any slot of a time that can be told.
const maxSlot = 1 << 50

// summarise tells what changed in this partition up to a boundary.
func (e *Engine) summarise(ix *indicator, boundary int64) {
	g := ix.gathering
	s := &Summary{
		Partition: e.partition.Number, Indicator: ix.cfg.Name, life: g.life,
		begins: !g.begun, after: ix.looked, through: boundary,
	}
	if g.begun && boundary == ix.looked { // a start in between: nothing was looked at
		s.after = never
	}
	for _, t := range e.tidings(ix, boundary) {
		s.rows = append(s.rows, rowsOf(&t, boundary)...)
	}
	g.begun = true
	e.tellOut(s)
}

// rowsOf returns what a member has to tell at a boundary, as it stands.
func rowsOf(t *tiding, boundary int64) []summaryRow {
	m := t.member
	row := summaryRow{name: m.name, why: t.why, from: t.from, to: t.to, head: t.head}
	if t.head {
		row.birth, row.dates = m.birth, m.dates.clone()
	}
	var rows []summaryRow
	var changed cells
	if t.from <= t.to {
		changed = m.cells.between(t.from, min(t.to+1, boundary))
	}
	for i := range changed {
		if len(row.cells) == rowCells {
			rows = append(rows, row)
			row = summaryRow{name: m.name, why: t.why, from: t.from, to: t.to}
		}
		c := changed[i]
		c.items = 0
		row.cells, row.ids = append(row.cells, c), append(row.ids, slices.Clone(m.eventIDs.of(c.slot)))
	}
	return append(rows, row)
}

// clone returns what gathered sums must know of the dates; nil of none.
func (d *dates) clone() *dates {
	if d == nil {
		return nil
	}
	return &dates{turns: slices.Clone(d.turns), outs: slices.Clone(d.outs), signed: [2]spans{slices.Clone(d.signed[0]), slices.Clone(d.signed[1])}}
}

// outbound is a summary that is to be handed over for another partition.
type outbound struct {
	home int
	s    *Summary
}

// tellOut hands a summary on: to the partition that gathers, or into what waits
// here. One of which there is nothing to say is lengthened by the next.
func (e *Engine) tellOut(s *Summary) {
	if e.gathers(s.Indicator) {
		for _, p := range s.parts() {
			e.receive(&p)
		}
		return
	}
	if n := len(e.told) - 1; n >= 0 && e.told[n].s.count == nil && e.told[n].s.Indicator == s.Indicator && e.told[n].s.life == s.life && len(e.told[n].s.rows) == 0 && !s.begins && !s.ends {
		last := e.told[n].s
		last.through, last.rows = s.through, s.rows
		return
	}
	e.told = append(e.told, outbound{config.PartitionOf(s.Indicator, 0, e.partition.Of), s})
}

// drainTold hands over the summaries for other partitions.
func (e *Engine) drainTold() []OutSummary {
	var list []OutSummary
	e.forgetNothing()
	for _, o := range e.told {
		for _, p := range o.s.parts() {
			list = append(list, OutSummary{o.home, p.encode()})
		}
	}
	e.told = nil
	return list
}

// byName sorts rows of several partitions.
func sortRows(rows []summaryRow) {
	slices.SortStableFunc(rows, func(a, b summaryRow) int { return cmp.Or(strings.Compare(a.name, b.name), 0) })
}

// newLife tells apart the lives of an indicator: by the set-up that brought it, and
// how often it did.
func (e *Engine) newLife(indicator string, setup *config.Setup) string {
	life := setup.Digest[:min(16, len(setup.Digest))]
	if e.lives == nil {
		e.lives = map[string]int{}
	}
	key := life + " " + indicator
	e.lives[key]++
	if n := e.lives[key]; n > 1 {
		return fmt.Sprintf("%s %d", life, n)
	}
	return life
}
