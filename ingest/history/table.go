package history

import (
	"bytes"
	"errors"
	"fmt"
	"io"
	"maps"
	"slices"
	"strings"
	"unicode/utf8"

	"tailbell/ingest/wire"
	"tailbell/monitor"
)

// BadRow is the reason of a row that can't be told apart into cells.
const BadRow monitor.Reason = "bad_row"

// columnKind is what a column of a CSV file holds.
type columnKind int

const (
	ignored columnKind = iota
	textColumn
	numberColumn
	timeColumn
	spanColumn
	flagColumn
)

// columnKinds are the columns by their name.
var columnKinds = map[string]columnKind{
	"id": textColumn, "series": textColumn,
	"start": timeColumn, "end": timeColumn, "at": timeColumn, "reported": timeColumn,
	"date":   spanColumn,
	"events": numberColumn, "exposure": numberColumn, "revision": numberColumn,
	"total": numberColumn, "exposure_total": numberColumn, "since": timeColumn,
	"retracted": flagColumn,
}

const columnNames = "id, series, start, end, at, date, events, exposure (or exposure[unit]), revision, reported, retracted, total, exposure_total, since"

type column struct {
	name string
	kind columnKind
}

// table reads the rows of a CSV file.
type table struct {
	*reader
	separator byte
	columns   []column
	// unit of the exposure as the header states it, "" if it does not.
	unit string
	// units holds what CheckUnit said of each series.
	units map[string]error
	// fixed says that the series comes from the options.
	fixed bool
	cells [][]byte
	json  []byte
	// hasSpan and hasTime say that the row has a date, or a start, end or at.
	hasSpan, hasTime bool
	plain            *plainRows // nil where rows need the decoder
}

// readHeader reads the line of column names.
func (r *reader) readHeader() (*table, error) {
	var header line
	for len(bytes.TrimSpace(header.text)) == 0 {
		var err error
		if header, err = r.lines.next(); errors.Is(err, io.EOF) {
			return nil, errors.New("the file is empty; its first line must name the columns: " + columnNames)
		} else if err != nil {
			return nil, err
		}
	}
	t := &table{reader: r, separator: separatorOf(header.text), units: make(map[string]error)}
	cells, open, ok := splitRow(nil, header.text, t.separator)
	if !ok || open || header.tooLong {
		return nil, fmt.Errorf("line %d: the line of column names has unmatched quotes or is too long", header.number)
	}
	for _, cell := range cells {
		if err := t.addColumn(string(cell)); err != nil {
			return nil, fmt.Errorf("line %d: %w", header.number, err)
		}
	}
	t.plain = newPlainRows(t)
	if err := t.checkColumns(); err != nil {
		return nil, fmt.Errorf("line %d: %w", header.number, err)
	}
	return t, nil
}

// separatorOf returns which of comma, semicolon and tab is the most frequent
// in the header; the comma if none is there.
func separatorOf(header []byte) byte {
	best, most := byte(','), bytes.Count(header, []byte{','})
	for _, c := range []byte{';', '\t'} {
		if n := bytes.Count(header, []byte{c}); n > most {
			best, most = c, n
		}
	}
	return best
}

func (t *table) addColumn(written string) error {
	name := strings.ToLower(strings.TrimSpace(written))
	if slices.ContainsFunc(t.opts.Ignore, func(s string) bool { return strings.EqualFold(strings.TrimSpace(s), name) }) {
		t.columns = append(t.columns, column{name: name})
		return nil
	}
	if rest, found := strings.CutPrefix(name, "exposure["); found {
		unit, closed := strings.CutSuffix(rest, "]")
		if !closed || strings.TrimSpace(unit) == "" {
			return fmt.Errorf("column %d, of the exposure, states no unit; write it like exposure[device-days]", len(t.columns)+1)
		}
		trimmed := strings.TrimSpace(written)
		name, t.unit = "exposure", strings.TrimSpace(trimmed[len("exposure["):len(trimmed)-1])
	}
	kind, known := columnKinds[name]
	if !known {
		return t.unknownColumn(name)
	}
	if slices.ContainsFunc(t.columns, func(c column) bool { return c.name == name }) {
		return fmt.Errorf("the column %s is there twice", name)
	}
	t.columns = append(t.columns, column{name: name, kind: kind})
	return nil
}

// unknownColumn says which column is not known, by its number: a file without
// names begins with a row of data, which must not be repeated.
func (t *table) unknownColumn(name string) error {
	text := fmt.Sprintf("the name of column %d is not known", len(t.columns)+1)
	if near := nearest(name); near != "" {
		text += fmt.Sprintf(" (is it %s, misspelt?)", near)
	}
	return fmt.Errorf("%s; the columns are %s; name the columns in the first line, or pass over this one with --ignore and its name", text, columnNames)
}

// nearest returns the known column whose name is at most two letters away, ""
// for none.
func nearest(name string) string {
	best, least := "", 3
	for _, known := range slices.Sorted(maps.Keys(columnKinds)) {
		if d := distance(name, known); d < least && d < len(known)-1 {
			best, least = known, d
		}
	}
	return best
}

// distance is how many letters must be put in, left out or changed to make one
// name the other (Levenshtein 1966).
func distance(a, b string) int {
	if len(a) > 2*len(b)+2 {
		return len(a)
	}
	row := make([]int, len(b)+1)
	for j := range row {
		row[j] = j
	}
	for i := range len(a) {
		diagonal := row[0]
		row[0] = i + 1
		for j := range len(b) {
			cost := diagonal
			if a[i] != b[j] {
				cost = 1 + min(diagonal, row[j], row[j+1])
			}
			diagonal, row[j+1] = row[j+1], cost
		}
	}
	return row[len(b)]
}

func (t *table) has(name string) bool {
	return slices.ContainsFunc(t.columns, func(c column) bool { return c.name == name && c.kind != ignored })
}

func (t *table) checkColumns() error {
	t.fixed = !t.has("series")
	switch {
	case t.fixed && t.opts.Series == "":
		return errors.New("there is no column series; add it, or name the file's series with --series")
	case !t.has("date") && !t.has("at") && !t.has("start") && !t.has("retracted"):
		return errors.New("no column says when; add date, at, or start and end")
	case t.has("date") && t.opts.Zone == nil:
		return errors.New("the column date needs to know in which zone days begin; name it with --zone, e.g. --zone UTC")
	}
	return nil
}

// row reads a row into the history.
func (t *table) row() error {
	first, err := t.lines.next()
	if err != nil {
		return err
	}
	if len(bytes.TrimSpace(first.text)) == 0 {
		return nil
	}
	raw, ok, err := t.split(first)
	if err != nil {
		return err
	}
	if ok && !first.tooLong && len(t.cells) == len(t.columns) && t.plain.row(first.number) {
		return nil
	}
	switch {
	case first.tooLong:
		t.fault(first.number, monitor.TooLarge, tooLong, raw)
	case !ok:
		t.fault(first.number, BadRow, `the quotes don't match; a cell is quoted as a whole, and a quote in it is written ""`, raw)
	case len(t.cells) != len(t.columns):
		t.fault(first.number, BadRow, fmt.Sprintf("the row has %d cells, but the first line names %d columns", len(t.cells), len(t.columns)), raw)
	default:
		t.build(first.number, raw)
	}
	return nil
}

// build makes the row an element in the contract's form and decodes it.
func (t *table) build(number int, raw []byte) {
	t.json = append(t.json[:0], '{')
	t.hasSpan, t.hasTime = false, false
	if t.fixed {
		t.field("series")
		t.json = wire.AppendText(t.json, t.opts.Series)
	}
	for i, c := range t.columns {
		cell := bytes.TrimSpace(t.cells[i])
		if len(cell) == 0 || c.kind == ignored {
			continue
		}
		if reason, detail := t.cell(c, string(cell)); reason != "" {
			t.fault(number, reason, detail, raw)
			return
		}
	}
	if t.hasSpan && t.hasTime {
		t.fault(number, monitor.BadInterval, "the row has a date and a start, end or at; give one of them", raw)
		return
	}
	t.json = append(t.json, '}')
	item := t.decoder.Observation(t.json)
	if o := &item.Observation; item.Reason == "" && o.HasExposure {
		if err := t.checkUnit(o.Series); err != nil {
			t.fault(number, monitor.BadExposure, err.Error(), raw)
			return
		}
	}
	t.plain.learn(&item)
	t.observation(&item, number, raw)
}

// field appends the name of a field.
func (t *table) field(name string) {
	if len(t.json) > 1 {
		t.json = append(t.json, ',')
	}
	t.json = append(append(append(t.json, '"'), name...), `":`...)
}

// cell appends a cell in the contract's form.
func (t *table) cell(c column, text string) (monitor.Reason, string) {
	switch c.kind {
	case ignored:
	case textColumn:
		if !utf8.ValidString(text) {
			return monitor.NotUTF8, fmt.Sprintf("%s is not UTF-8; save the file in this encoding", c.name)
		}
		t.field(c.name)
		t.json = wire.AppendText(t.json, text)
	case numberColumn:
		if !isNumber(text) {
			return numberReason(c.name), fmt.Sprintf("%q is no number; %s is %s", text, c.name, numberLike(c.name))
		}
		t.field(c.name)
		t.json = append(t.json, text...)
	case flagColumn:
		t.field(c.name)
		switch lower := strings.ToLower(text); lower {
		case "true", "false":
			t.json = append(t.json, lower...)
		default:
			return monitor.BadRevision, fmt.Sprintf("%s is %q; it must be true or false, or be left empty", c.name, text)
		}
	case timeColumn:
		at, err := moment(text, t.opts.Zone)
		if err != nil {
			return monitor.BadTime, fmt.Sprintf("%s: %v", c.name, err)
		}
		if t.hasTime = t.hasTime || c.name != "reported"; t.opts.Tape != nil {
			t.offsets.note(text, at)
		}
		t.time(c.name, at)
	case spanColumn:
		start, end, err := span(text, t.opts.Zone)
		if err != nil {
			return monitor.BadTime, fmt.Sprintf("%s: %v", c.name, err)
		}
		t.hasSpan = true
		t.time("start", start)
		t.time("end", end)
	}
	return "", ""
}

func (t *table) time(name string, at monitor.Instant) {
	t.field(name)
	t.json = append(wire.AppendTime(append(t.json, '"'), at), '"')
}

func numberLike(column string) string {
	if column == "exposure" || column == "exposure_total" {
		return "a plain number such as 12 or 0.5, with a point and without thousands marks"
	}
	return "a whole number such as 0 or 12"
}

func numberReason(column string) monitor.Reason {
	switch column {
	case "events", "total":
		return monitor.BadEvents
	case "exposure", "exposure_total":
		return monitor.BadExposure
	}
	return monitor.BadRevision
}

// checkUnit compares the unit in the header with that of the indicator.
func (t *table) checkUnit(series string) error {
	if t.unit == "" || t.opts.CheckUnit == nil {
		return nil
	}
	err, known := t.units[series]
	if !known {
		err = t.opts.CheckUnit(series, t.unit)
		t.units[series] = err
	}
	return err
}

// isNumber reports whether the text is a number in JSON's syntax.
func isNumber(text string) bool {
	rest := strings.TrimPrefix(text, "-")
	whole := digits(rest)
	if whole == 0 || (whole > 1 && rest[0] == '0') {
		return false
	}
	rest = rest[whole:]
	if strings.HasPrefix(rest, ".") {
		n := digits(rest[1:])
		if n == 0 {
			return false
		}
		rest = rest[1+n:]
	}
	if rest == "" {
		return true
	}
	if rest[0] != 'e' && rest[0] != 'E' {
		return false
	}
	rest = strings.TrimPrefix(strings.TrimPrefix(rest[1:], "+"), "-")
	return rest != "" && digits(rest) == len(rest)
}

func digits(text string) int {
	n := 0
	for n < len(text) && text[n]-'0' <= 9 {
		n++
	}
	return n
}
