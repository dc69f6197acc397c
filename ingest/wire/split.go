package wire

import (
	"bytes"

	"tailbell/monitor"
)

// payload is what a message holds, without its envelope.
type payload struct {
	data []byte
	// enveloped says that it was taken out of a CloudEvent.
	enveloped bool
	// lines says that several elements may stand one a line; else the data
	// are one JSON value.
	lines bool
}

// split decodes the elements of a payload. The fault is of the payload as a
// whole.
//
// An array is split at its commas: brackets and quotes must match, while the
// elements between need not be valid. Anything else is split in lines: an
// element begins on a line, and is the bracketed value that begins there, if
// one does and nothing follows it on its last line; else it is that line.
func (d *Decoder) split(p payload) ([]monitor.Item, *fault) {
	i := skipSpace(p.data, 0)
	switch {
	case i == len(p.data):
		return nil, refuse(monitor.NotJSON, "the message is empty; it must hold an observation")
	case p.data[i] == '[':
		return d.array(p.data, i+1)
	case p.lines:
		return d.lines(p.data, i)
	}
	return append(d.room(nil), d.Observation(trim(p.data[i:]))), nil
}

// array decodes the elements of the array that begins before i.
func (d *Decoder) array(data []byte, i int) ([]monitor.Item, *fault) {
	items := []monitor.Item(nil)
	i = skipSpace(data, i)
	for first := true; ; first = false {
		if first && i < len(data) && data[i] == ']' {
			break
		}
		if items == nil {
			items = d.room(data[i:])
		}
		if len(items) == d.limits.Observations {
			return nil, d.tooMany()
		}
		items = append(items, monitor.Item{})
		end, f := d.element(data, i, &items[len(items)-1])
		if f != nil {
			return nil, f
		}
		i = end
		if data[i] == ']' {
			break
		}
		i = skipSpace(data, i+1)
	}
	if rest := skipSpace(data, i+1); rest < len(data) {
		return nil, refuse(monitor.NotJSON, "at byte %d: there is more text after the end of the array; send one array a message", rest)
	}
	return items, nil
}

// element decodes the element of an array at i, and returns the position of
// the comma or bracket after it.
func (d *Decoder) element(data []byte, i int, item *monitor.Item) (end int, f *fault) {
	if end = quick(data, i, &item.Observation); end >= 0 && end-i <= d.limits.ElementBytes {
		if next := skipSpace(data, end); next < len(data) && (data[next] == ',' || data[next] == ']') {
			item.Raw = data[i:end:end]
			return next, nil
		}
	}
	end, f = elementEnd(data, i, ']')
	if f != nil {
		return 0, f
	}
	raw := trim(data[i:end])
	if len(raw) == 0 {
		*item = refuse(monitor.NotJSON, "there is nothing between two commas or before the closing bracket; leave the comma out").item(raw)
		return end, nil
	}
	d.careful(raw, item)
	return end, nil
}

// elementEnd returns the position of the comma or the closing bracket that
// ends the member of an array or object at i. It looks at nothing but quotes
// and brackets.
func elementEnd(data []byte, i int, closing byte) (int, *fault) {
	var open []byte
	for start := i; i < len(data); i++ {
		switch c := data[i]; c {
		case '"':
			end := stringEnd(data, i)
			if end < 0 {
				return 0, refuse(monitor.NotJSON, "at byte %d: a text has no closing quote, so the message can't be split; send valid JSON", i)
			}
			i = end - 1
		case '{', '[':
			open = append(open, c)
		case ',':
			if len(open) == 0 {
				return i, nil
			}
		case ']', '}':
			if len(open) == 0 && c == closing {
				return i, nil
			}
			// In ASCII each closing bracket stands two after its opening one.
			if len(open) == 0 || open[len(open)-1] != c-2 {
				return 0, refuse(monitor.NotJSON, "at byte %d: a closing bracket has no partner after byte %d, so the message can't be split; send valid JSON", i, start)
			}
			open = open[:len(open)-1]
		}
	}
	return 0, refuse(monitor.NotJSON, "a closing %c is missing, so the message can't be split; send valid JSON", closing)
}

// lines decodes elements that stand one a line, from i on.
func (d *Decoder) lines(data []byte, i int) ([]monitor.Item, *fault) {
	items := []monitor.Item(nil)
	for i < len(data) {
		if items == nil {
			items = d.room(data[i:])
		}
		if len(items) == d.limits.Observations {
			return nil, d.tooMany()
		}
		items = append(items, monitor.Item{})
		i = skipSpace(data, d.line(data, i, &items[len(items)-1]))
	}
	return items, nil
}

// line decodes the element that begins at i, and returns the position after
// it.
func (d *Decoder) line(data []byte, i int, item *monitor.Item) (end int) {
	if end = quick(data, i, &item.Observation); end >= 0 && end-i <= d.limits.ElementBytes && endsLine(data, end) {
		item.Raw = data[i:end:end]
		return end
	}
	end = d.lineElementEnd(data, i)
	d.careful(trim(data[i:end]), item)
	return end
}

// endsLine reports whether nothing follows on the line of i.
func endsLine(data []byte, i int) bool {
	for i < len(data) && isSpace(data[i]) {
		if data[i] == '\n' {
			return true
		}
		i++
	}
	return i == len(data)
}

// lineElementEnd returns the position after the element that begins at i: the
// value in brackets there, which may go over several lines, if nothing follows
// it on its last line; else the line.
func (d *Decoder) lineElementEnd(data []byte, i int) int {
	lineEnd := len(data)
	if n := bytes.IndexByte(data[i:], '\n'); n >= 0 {
		lineEnd = i + n
	}
	var open []byte
	for at := i; at < len(data); at++ {
		switch c := data[at]; c {
		case '"':
			end := stringEnd(data, at)
			if end < 0 || bytes.IndexByte(data[at:end], '\n') >= 0 {
				return lineEnd
			}
			at = end - 1
		case '{', '[':
			open = append(open, c)
		case '}', ']':
			if len(open) == 0 || open[len(open)-1] != c-2 {
				return lineEnd
			}
			open = open[:len(open)-1]
			if len(open) > 0 {
				continue
			}
			if endsLine(data, at+1) {
				return at + 1
			}
			return lineEnd
		case '\n':
			// The limit keeps a message of many broken lines from being
			// scanned to its end for each of them.
			if len(open) == 0 || len(open) > d.limits.Depth {
				return lineEnd
			}
		}
	}
	return lineEnd
}

func (d *Decoder) tooMany() *fault {
	return refuse(monitor.TooMany, "the message holds more than %d observations; send it in parts", d.limits.Observations)
}

// room returns an empty list for the items of a message, with room for about
// as many as it has closing brackets, or for one from the stock.
func (d *Decoder) room(data []byte) []monitor.Item {
	const stock = 32
	if n := min(bytes.Count(data, []byte{'}'}), d.limits.Observations); n > 1 {
		return make([]monitor.Item, 0, n)
	}
	if len(d.spare) == 0 {
		d.spare = make([]monitor.Item, stock)
	}
	items := d.spare[:0:1]
	d.spare = d.spare[1:]
	return items
}

func trim(data []byte) []byte {
	end := len(data)
	for end > 0 && isSpace(data[end-1]) {
		end--
	}
	return data[skipSpace(data[:end], 0):end]
}
