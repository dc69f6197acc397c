package wire

import (
	"bytes"
	"errors"
	"strings"
	"unicode"
	"unicode/utf8"

	"tailbell/config"
	"tailbell/monitor"
)

// MaxIDLength is the longest id of an observation, in characters.
const MaxIDLength = 200

// Observation decodes one element. The item's Raw is a copy if the element is
// refused, else data itself. A refused item has the observation's series, if
// that could be read, and nothing else of it.
//
// Of several faults the one given is the first of these: the element's size;
// its syntax as JSON in UTF-8; the fields in the order of the text; then what
// they say together.
func (d *Decoder) Observation(data []byte) monitor.Item {
	var item monitor.Item
	if len(data) <= d.limits.ElementBytes {
		if end := quick(data, skipSpace(data, 0), &item.Observation); end >= 0 && skipSpace(data, end) == len(data) {
			item.Raw = data[:len(data):len(data)]
			return item
		}
	}
	d.careful(data, &item)
	return item
}

// careful decodes one element, however it is written, and says what is wrong.
// It overwrites the whole item.
func (d *Decoder) careful(data []byte, item *monitor.Item) {
	*item = monitor.Item{}
	members, f := d.members(data)
	if f == nil {
		w := draft{o: &item.Observation}
		if f = w.readAll(members); f == nil {
			item.Raw = data[:len(data):len(data)]
			return
		}
	}
	*item = f.item(data)
	item.Observation.Series = seriesOf(members)
}

// members checks an element's size and syntax, and returns its fields.
func (d *Decoder) members(data []byte) ([]field, *fault) {
	if len(data) > d.limits.ElementBytes {
		return nil, refuse(monitor.TooLarge, "the element has %d bytes, the limit is %d; an observation needs a few hundred",
			len(data), d.limits.ElementBytes)
	}
	if f := checkSyntax(data, d.limits.Depth); f != nil {
		return nil, f
	}
	if data[skipSpace(data, 0)] != '{' {
		return nil, refuse(monitor.NotObject, "the element is %s; an observation is a JSON object", nameOf(data))
	}
	return fields(data), nil
}

func (w *draft) readAll(members []field) *fault {
	for _, field := range members {
		if f := w.read(field); f != nil {
			return f
		}
	}
	return w.finish()
}

// seriesOf returns the series of a refused observation, if it has a valid one.
func seriesOf(members []field) string {
	for _, field := range members {
		var w draft
		if field.name == "series" && w.readSeries(field) == nil {
			return string(w.series)
		}
	}
	return ""
}

// nameOf says what kind of JSON value the text begins with.
func nameOf(value []byte) string {
	switch value[skipSpace(value, 0)] {
	case '{':
		return "an object"
	case '[':
		return "an array"
	case '"':
		return "a text"
	case 't', 'f':
		return "true or false"
	case 'n':
		return "null"
	}
	return "a number"
}

func (w *draft) read(field field) *fault {
	m := memberOf([]byte(field.name))
	if m == 0 {
		return refuse(monitor.UnknownField, "the contract has no field %q; leave it out%s", clip(field.name), perhaps(field.name))
	}
	if w.has(m) {
		return refuse(monitor.DuplicateField, "the field %s is given twice; give it once", field.name)
	}
	w.seen |= m
	switch m {
	case hasSeries:
		return w.readSeries(field)
	case hasID:
		return w.readID(field)
	case hasStart:
		return readTime(field, &w.o.Start)
	case hasEnd:
		return readTime(field, &w.o.End)
	case hasAt:
		return readTime(field, &w.at)
	case hasReported:
		return readTime(field, &w.o.Reported)
	case hasSince:
		return readTime(field, &w.o.Since)
	case hasEvents, hasTotal:
		return readWhole(field, monitor.BadEvents, &w.o.Events)
	case hasRevision:
		return readWhole(field, monitor.BadRevision, &w.o.Revision)
	case hasExposure, hasExposureTotal:
		return w.readExposure(field)
	case hasRetracted:
		return w.readRetracted(field)
	}
	return nil
}

// perhaps hints at what an unknown field is about.
func perhaps(name string) string {
	switch lower := strings.ToLower(name); {
	case memberOf([]byte(lower)) != 0:
		return ", or write it " + lower
	case lower == "specversion":
		return "; a CloudEvent is a message of its own, not an element"
	}
	return ""
}

// isText reports whether the value is a string; if not, the fault says what it
// is instead.
func isText(field field, reason monitor.Reason) *fault {
	if field.value[0] == '"' {
		return nil
	}
	return refuse(reason, "%s is %s; it must be a text in quotes%s", field.name, nameOf(field.value), orAbsent(field))
}

func orAbsent(field field) string {
	if field.value[0] == 'n' {
		return ", or be left out"
	}
	return ""
}

func (w *draft) readSeries(field field) *fault {
	if f := isText(field, monitor.BadSeries); f != nil {
		return f
	}
	w.series = unquote(field.value)
	if err := config.CheckSeries(string(w.series)); err != nil {
		return refuse(monitor.BadSeries, "series %q: %v; write it like site/ward-3/falls", clip(w.series), err)
	}
	return nil
}

func (w *draft) readID(field field) *fault {
	if f := isText(field, monitor.BadID); f != nil {
		return f
	}
	w.id = unquote(field.value)
	switch n := utf8.RuneCount(w.id); {
	case n == 0:
		return refuse(monitor.BadID, "id is empty; give one, or leave it out")
	case n > MaxIDLength:
		return refuse(monitor.BadID, "id has %d characters, the limit is %d; shorten it", n, MaxIDLength)
	case bytes.ContainsFunc(w.id, unicode.IsControl):
		return refuse(monitor.BadID, "id %q has a control character; leave it out", clip(w.id))
	}
	return nil
}

func readTime(field field, at *monitor.Instant) *fault {
	if f := isText(field, monitor.BadTime); f != nil {
		return f
	}
	text := unquote(field.value)
	moment, ok := parseTime(text)
	if !ok {
		return refuse(monitor.BadTime, "%s: %s", field.name, whyNoTime(string(text)))
	}
	*at = moment
	return nil
}

// isNumber reports whether the value is a number; if not, the fault says what
// it is instead.
func isNumber(field field, reason monitor.Reason) *fault {
	if c := field.value[0]; c == '-' || c-'0' <= 9 {
		return nil
	}
	return refuse(reason, "%s is %s; it must be a number without quotes%s", field.name, nameOf(field.value), orAbsent(field))
}

func readWhole(field field, reason monitor.Reason, n *int64) *fault {
	if f := isNumber(field, reason); f != nil {
		return f
	}
	value, ok := whole(field.value)
	if !ok {
		return refuse(reason, "%s is %s; it must be a whole number from 0 to 9007199254740992", field.name, clip(field.value))
	}
	*n = value
	return nil
}

func (w *draft) readExposure(field field) *fault {
	if f := isNumber(field, monitor.BadExposure); f != nil {
		return f
	}
	value, err := decimal(field.value)
	if errors.Is(err, config.ErrDecimalRange) {
		return refuse(monitor.BadExposure, "%s is %s, which has %v; round it", field.name, clip(field.value), err)
	}
	if err != nil {
		return refuse(monitor.BadExposure, "%s is %s, which is %v", field.name, clip(field.value), err)
	}
	w.o.Exposure = value
	return nil
}

func (w *draft) readRetracted(field field) *fault {
	if c := field.value[0]; c != 't' && c != 'f' {
		return refuse(monitor.BadRevision, "retracted is %s; it must be true, or be left out", nameOf(field.value))
	}
	w.o.Retracted = field.value[0] == 't'
	return nil
}
