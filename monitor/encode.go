package monitor

import (
	"encoding/binary"
	"errors"
	"fmt"
	"math"
)

// The encoding of a series, whole or as a patch: a version byte, a byte of
// flags, with flagNamed its name and its indicator's, then its head (all that
// is not a cell), then the cells: all of them in a state, the changed ones in
// a patch. Integers are varints, strings and lists are prefixed by length.
const encodingVersion = 3

// withCounts is the version of encodings of series that partitions counted for each
// other: what they had a part in follows their limits.
const withCounts = 4

// withoutLimits is the version of encodings that know no allowances: they are
// read as such.
const withoutLimits = 1

// withoutSignOff is that of those that know no signed-off slots.
const withoutSignOff = 2

// idVersion is that of the encoding of an id.
const idVersion = 1

// With flagNamed what older patches and states say of the series holds no more;
// flagRetired makes it a stub, see there. With flagArrivals what looks at arrivals need follows
// the head.
const (
	flagNamed    = 1
	flagRetired  = 2
	flagArrivals = 4
	flagTotals   = 16 // the latest readings of counters follow the arrivals
	flagSilence  = 8  // there was a silence: its alerts precede the rest of the head
	flagNews     = 32
	flagGathered = 64  // with flagNamed: a gathered sum
	flagMirror   = 128 // with flagNamed: what is known of a member of such sums
)

// errEncoding says that stored bytes are not what this program wrote.
var errEncoding = errors.New("monitor: stored state can't be read")

// encode appends the series to b.
func (s *series) encode(b []byte, whole bool) []byte {
	at := len(b) + 1 // of the flags
	b = append(b, encodingVersion, 0)
	if s.mirror {
		return s.encodeMirror(b, at, whole)
	}
	if s.arrivals != nil {
		b[at] |= flagArrivals
	}
	if s.totals != nil {
		b[at] |= flagTotals
	}
	b = s.encodeName(b, at, whole)
	if s.silence != nil && s.silence.opened > 0 {
		b[1] |= flagSilence
		b = s.silence.encode(b)
	}
	b = binary.AppendVarint(b, s.birth)
	b = binary.AppendVarint(b, s.trimmed)
	b = binary.AppendVarint(b, s.unpaired)
	b = binary.AppendVarint(b, int64(s.seen))
	b = binary.AppendUvarint(b, uint64(len(s.windows)))
	for _, w := range s.windows {
		b = append(b, byte(w.withheld), flag(w.hasMade))
		b = binary.AppendVarint(b, w.made)
		b = binary.AppendVarint(b, w.withheldSince)
	}
	for d := range s.tails {
		b = s.tails[d].encode(b)
	}
	b = s.encodeReferences(b)
	b = s.encodeLimits(b)
	if s.own != nil {
		b[at-1] = withCounts
		b = s.encodeOwn(b)
	}
	b = s.encodeArrivals(b, whole)
	b = s.totals.encode(b)
	if s.sum != nil && !s.isGathered() {
		return binary.AppendUvarint(b, 0) // its cells follow from its members'
	}
	if whole {
		own := s.ownCells()
		b = binary.AppendUvarint(b, uint64(len(own)))
		for i := range own {
			b = s.encodeCell(b, &own[i])
		}
		return b
	}
	b = binary.AppendUvarint(b, uint64(len(s.dirty)))
	for _, slot := range s.dirty {
		if i, ok := s.cells.find(slot); ok {
			b = s.encodeCell(b, &s.cells[i])
			continue
		}
		b = s.encodeNoCell(b, slot) // trimmed since
	}
	return b
}

func (s *series) encodeCell(b []byte, c *cell) []byte {
	b = binary.AppendVarint(b, c.slot)
	b = binary.AppendVarint(b, c.events)
	b = binary.AppendUvarint(b, c.exposure.Hi)
	b = binary.AppendUvarint(b, c.exposure.Lo)
	b = binary.AppendUvarint(b, uint64(c.saysEvents))
	b = binary.AppendUvarint(b, uint64(c.saysExposure))
	b = binary.AppendUvarint(b, uint64(c.items))
	bits := flag(c.revised)
	if s.isGathered() {
		bits |= cellHere | flag(c.provisional)<<1
	}
	b = append(binary.AppendVarint(b, c.late), bits)
	ids := s.eventIDs.of(c.slot)
	b = binary.AppendUvarint(b, uint64(len(ids)))
	for _, id := range ids {
		b = appendString(b, id)
	}
	return b
}

// encodeName writes whose state follows, and what gathered sums need besides.
func (s *series) encodeName(b []byte, at int, whole bool) []byte {
	if whole || s.fresh {
		b[at] |= flagNamed
		b = appendString(b, s.name)
		b = appendString(b, s.indicator.cfg.Name)
		if s.isGathered() {
			b[at] |= flagGathered
		}
	}
	if s.news != nil {
		b[at] |= flagNews
		b = s.news.encode(b)
	}
	if s.isGathered() {
		b = s.dates.encodeAll(b)
	}
	return b
}

// encodeNoCell says that there is no cell for the slot any more.
func (s *series) encodeNoCell(b []byte, slot int64) []byte {
	b = s.encodeCell(b, &cell{slot: slot})
	if s.isGathered() {
		b[len(b)-2] &^= cellHere // before the number of ids
	}
	return b
}

// The bits that end a cell; the last two are of gathered sums alone.
const (
	cellRevised     = 1
	cellProvisional = 2
	cellHere        = 4
)

// encode writes the tail: its alerts first, the current one in front, then
// the lit looks with the number of their alert, from 1, or 0.
func (t *tail) encode(b []byte) []byte {
	b = append(b, flag(t.disarmed), flag(t.current != nil))
	b = binary.AppendUvarint(b, uint64(t.quiet))
	b = binary.AppendUvarint(b, uint64(t.opened))
	alerts := t.past
	if t.current != nil {
		alerts = append([]*alert{t.current}, t.past...)
	}
	var numbers map[*alert]uint64 // few series have alerts
	b = binary.AppendUvarint(b, uint64(len(alerts)))
	for i, a := range alerts {
		if numbers == nil {
			numbers = map[*alert]uint64{}
		}
		numbers[a] = uint64(i + 1)
		b = a.encode(b)
	}
	b = binary.AppendUvarint(b, uint64(len(t.lit)))
	for i := range t.lit {
		l := &t.lit[i]
		b = binary.AppendVarint(b, l.boundary)
		b = binary.AppendUvarint(b, uint64(l.window))
		b = binary.AppendVarint(b, l.events)
		b = binary.AppendUvarint(b, l.exposure.Hi)
		b = binary.AppendUvarint(b, l.exposure.Lo)
		b = appendFloat(b, l.log10p)
		b = binary.AppendVarint(b, int64(l.at))
		b = binary.AppendUvarint(b, numbers[l.alert])
	}
	return b
}

// encodeReferences writes the estimates, the comparator in front if there is
// one, then the marked spans.
func (s *series) encodeReferences(b []byte) []byte {
	list := s.references
	b = append(b, flag(s.comparator != nil))
	if s.comparator != nil {
		list = append([]reference{*s.comparator}, list...)
	}
	b = binary.AppendUvarint(b, uint64(len(list)))
	for i := range list {
		b = list[i].encode(b)
	}
	b = binary.AppendUvarint(b, uint64(len(s.marked)))
	for _, m := range s.marked {
		b = appendString(b, m.alert)
		b = binary.AppendVarint(b, m.from)
		b = binary.AppendVarint(b, m.to)
	}
	return b
}

func (r *reference) encode(b []byte) []byte {
	for _, v := range [...]int64{r.from, r.period, r.of, r.events, r.begin, r.end, r.leftOut, r.peers} {
		b = binary.AppendVarint(b, v)
	}
	b = binary.AppendUvarint(b, r.exposure.Hi)
	b = binary.AppendUvarint(b, r.exposure.Lo)
	return appendFloat(appendFloat(b, r.weighted), r.between)
}

func (a *alert) encode(b []byte) []byte {
	b = appendString(b, a.record.ID)
	b = binary.AppendVarint(b, a.first)
	b = binary.AppendVarint(b, a.last)
	b = binary.AppendUvarint(b, a.windows)
	b = append(b, flag(a.frozen), flag(a.pending))
	b = binary.AppendVarint(b, a.opening.boundary)
	b = binary.AppendUvarint(b, uint64(a.opening.window))
	b = binary.AppendVarint(b, a.worst.boundary)
	b = binary.AppendUvarint(b, uint64(a.worst.window))
	return appendFloat(b, a.worstLog10P)
}

func flag(on bool) byte {
	if on {
		return 1
	}
	return 0
}

func appendString(b []byte, s string) []byte {
	return append(binary.AppendUvarint(b, uint64(len(s))), s...)
}

func appendFloat(b []byte, f float64) []byte {
	return binary.LittleEndian.AppendUint64(b, math.Float64bits(f))
}

// reader reads an encoding; after the first fault it returns zeros.
type reader struct {
	b   []byte
	err error
}

func (r *reader) fail(what string) {
	if r.err == nil {
		r.err = fmt.Errorf("%w: %s", errEncoding, what)
	}
	r.b = nil
}

func (r *reader) byte() byte {
	if len(r.b) == 0 {
		r.fail("it ends too early")
		return 0
	}
	c := r.b[0]
	r.b = r.b[1:]
	return c
}

func (r *reader) flag() bool { return r.byte() != 0 }

func (r *reader) int() int64 {
	if len(r.b) > 0 && r.b[0] < 0x80 { // most are small
		v := int64(r.b[0])
		r.b = r.b[1:]
		return v>>1 ^ -(v & 1)
	}
	v, n := binary.Varint(r.b)
	if n <= 0 {
		r.fail("a number is cut off")
		return 0
	}
	r.b = r.b[n:]
	return v
}

func (r *reader) uint() uint64 {
	if len(r.b) > 0 && r.b[0] < 0x80 {
		v := uint64(r.b[0])
		r.b = r.b[1:]
		return v
	}
	v, n := binary.Uvarint(r.b)
	if n <= 0 {
		r.fail("a number is cut off")
		return 0
	}
	r.b = r.b[n:]
	return v
}

// length reads the length of a list whose elements take a byte at least.
func (r *reader) length() int {
	n := r.uint()
	if n > uint64(len(r.b)) {
		r.fail("a list is longer than what is left")
		return 0
	}
	return int(n)
}

func (r *reader) string() string { return string(r.bytes()) }

// bytes reads a string; it shares the encoding's memory.
func (r *reader) bytes() []byte {
	n := r.length()
	s := r.b[:n]
	r.b = r.b[n:]
	return s
}

func (r *reader) float() float64 {
	if len(r.b) < 8 {
		r.fail("a number is cut off")
		return 0
	}
	f := math.Float64frombits(binary.LittleEndian.Uint64(r.b))
	r.b = r.b[8:]
	return f
}

func (r *reader) quantity() Quantity {
	hi := r.uint()
	return Quantity{hi, r.uint()}
}
