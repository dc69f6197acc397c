package history

import (
	"bytes"
	"fmt"
	"time"

	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/replay"
)

// offsetsSeen remembers which offsets of time a file has.
type offsetsSeen struct {
	// first is the file's first offset, "" before there is one; told are
	// others that were remarked upon or are the zone's own.
	first string
	// row is the first offset in the present row that is another one, and at
	// the time that has it.
	row string
	at  monitor.Instant
}

// offsetOf returns the offset of a time as it is written, "" if it has none.
func offsetOf[T string | []byte](text T) string {
	n := len(text)
	switch {
	case n >= 20 && (text[n-1] == 'Z' || text[n-1] == 'z'):
		return "Z"
	case n >= 25 && text[n-3] == ':' && (text[n-6] == '+' || text[n-6] == '-'):
		return string(text[n-6:])
	}
	return ""
}

// isNew reports whether the time has another offset than the file's first one.
func (o *offsetsSeen) isNew(text []byte) bool {
	offset := offsetOf(text)
	return offset != "" && offset != o.first
}

// note remembers the offset of a time of the present row.
func (o *offsetsSeen) note(text string, at monitor.Instant) {
	offset := offsetOf(text)
	switch {
	case offset == "" || offset == o.first:
	case o.first == "":
		o.first = offset
	case o.row == "":
		o.row, o.at = offset, at
	}
}

// remark tells of a row whose times have another offset than the rows above
// it, unless its zone has both.
func (r *reader) remark(series string, raw []byte, place replay.Place) {
	if len(raw) > 0 && raw[0] == '{' {
		r.offsets.noteJSON(raw)
	}
	offset := r.offsets.row
	if offset == "" {
		return
	}
	r.offsets.row = ""
	zone := r.opts.Zone
	if zone == nil && r.opts.ZoneOf != nil {
		zone = r.opts.ZoneOf(series)
	}
	const layout = "Z07:00"
	if zone != nil && zone != time.UTC && r.offsets.at.Time().In(zone).Format(layout) == offset {
		return
	}
	r.opts.Tape.Remark(replay.Remark{Place: place, Kind: replay.MixedOffsets, Detail: fmt.Sprintf(
		"its times have the offset %s, those above %s: check that both are meant", offset, r.offsets.first)})
}

// noteJSON remembers the offsets of a line of JSON that was understood.
func (o *offsetsSeen) noteJSON(raw []byte) {
	for _, name := range []string{"start", "end", "at"} {
		_, rest, found := bytes.Cut(raw, []byte(`"`+name+`"`))
		if !found {
			continue
		}
		_, rest, _ = bytes.Cut(rest, []byte{'"'})
		text, _, _ := bytes.Cut(rest, []byte{'"'})
		if at, err := wire.ParseTime(string(text)); err == nil {
			o.note(string(text), at)
		}
	}
}
