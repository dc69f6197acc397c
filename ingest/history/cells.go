package history

import (
	"bytes"
	"errors"
	"io"
)

// A quoted cell may go over several lines, up to these bounds; a quote that is
// not closed within them spoils only its own line.
const (
	maxRowLines = 50
	maxRowBytes = 64 << 10
)

// split tells the row that begins with this line apart into cells. It returns
// the row as written; not ok means that its quotes don't match, and that only
// the first line was used.
func (t *table) split(first line) (raw []byte, ok bool, err error) {
	var open bool
	t.cells, open, ok = splitRow(t.cells[:0], first.text, t.separator)
	if !open {
		return first.text, ok, nil
	}
	row := bytes.Clone(first.text)
	whole := row
	var taken []line
	for len(taken) < maxRowLines && len(whole) < maxRowBytes {
		next, err := t.lines.next()
		if errors.Is(err, io.EOF) {
			break
		}
		if err != nil {
			return nil, false, err
		}
		next.text = bytes.Clone(next.text)
		taken = append(taken, next)
		whole = append(append(bytes.Clone(whole), '\n'), next.text...)
		t.cells, open, ok = splitRow(t.cells[:0], whole, t.separator)
		if !open {
			break
		}
	}
	if !open && ok && len(t.cells) == len(t.columns) {
		return whole, true, nil
	}
	t.lines.takeBack(taken)
	return row, false, nil
}

// splitRow appends the cells of a row. Open says that it ends inside quotes,
// not ok that quotes stand where they must not.
func splitRow(cells [][]byte, row []byte, separator byte) (list [][]byte, open, ok bool) {
	for {
		var cell []byte
		lead := 0
		for lead < len(row) && row[lead] == ' ' {
			lead++
		}
		if lead < len(row) && row[lead] == '"' {
			cell, row, open = quotedCell(row[lead+1:])
			if open {
				return cells, true, true
			}
			row = bytes.TrimLeft(row, " ")
			if len(row) > 0 && row[0] != separator {
				return cells, false, false
			}
		} else {
			end := bytes.IndexByte(row, separator)
			if end < 0 {
				end = len(row)
			}
			cell, row = row[:end], row[end:]
		}
		cells = append(cells, cell)
		if len(row) == 0 {
			return cells, false, true
		}
		row = row[1:]
	}
}

// quotedCell reads a cell after its opening quote, and returns what follows
// its closing one.
func quotedCell(row []byte) (cell, rest []byte, open bool) {
	var joined []byte
	for i := 0; ; {
		n := bytes.IndexByte(row[i:], '"')
		if n < 0 {
			return nil, nil, true
		}
		i += n
		if i+1 == len(row) || row[i+1] != '"' {
			if joined == nil {
				return row[:i], row[i+1:], false
			}
			return append(joined, row[:i]...), row[i+1:], false
		}
		joined = append(joined, row[:i+1]...)
		row = row[i+2:]
		i = 0
	}
}
