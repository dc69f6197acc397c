package main

import (
	"bufio"
	"bytes"
	"encoding/csv"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"slices"
	"strconv"
	"strings"

	"github.com/spf13/cobra"

	"tailbell/exact"
)

// The columns of a table that mean something, and those that are added to it.
const (
	colUnit              = "unit"
	colEvents            = "events"
	colExposure          = "exposure"
	colTrials            = "trials"
	colBaseline          = "baseline"
	colReferenceEvents   = "reference_events"
	colReferenceExposure = "reference_exposure"
	colReferenceTrials   = "reference_trials"
	colMargin            = "margin"
)

var addedColumns = []string{
	"p", "log10_p", "rate", "rate_lower", "rate_upper", "ratio", "ratio_lower", "ratio_upper",
	"critical_count", "attained_size", "holm_p", "bh_p", "hochberg_p", "by_p",
	"fcr_alpha", "fcr_rate_lower", "fcr_rate_upper", "fcr_ratio_lower", "fcr_ratio_upper", "problem",
}

// rowColumns is how many of them a row knows by itself, short of what follows
// from all rows.
const rowColumns = 10

// exactTable gathers the answered rows as the text they will be printed as, short of the p-values
// adjusted over all rows: a million rows then take some 300 MB.
type exactTable struct {
	options exactOptions
	json    bool
	rows    []exactRow
	chunk   []byte
	line    bytes.Buffer
	csv     *csv.Writer
	record  []string
}

// exactRow is one row: its line in the file, its text, its p, and what is wrong with it. It keeps
// its question if its p is so small that it may yet be selected.
type exactRow struct {
	line int
	text []byte
	p    float64
	err  error
	ask  *question
}

func (f *exactFlags) answerTable(c *cobra.Command, path string) (err error) {
	if f.hasEvents {
		return &usageError{errors.New("--events goes with one question, not with a table: its events are a column")}
	}
	in := c.InOrStdin()
	if path != "-" {
		file, openErr := os.Open(path)
		if openErr != nil {
			return fmt.Errorf("open the table: %w", openErr)
		}
		defer func() { err = errors.Join(err, file.Close()) }()
		in = file
	}
	table, picture := newExactTable(f.options, f.json), unitsFigure{}
	header, err := readTable(bufio.NewReaderSize(in, 1<<16), f.question, f.options, picture.and(table.add))
	if err != nil {
		return fmt.Errorf("%s: %w", path, err)
	}
	bad := 0
	for _, r := range table.rows {
		if r.err == nil {
			continue
		}
		bad++
		if _, err := fmt.Fprintf(c.ErrOrStderr(), "%s: line %d: %v\n", path, r.line, r.err); err != nil {
			return fmt.Errorf("report a row: %w", err)
		}
	}
	out := bufio.NewWriterSize(c.OutOrStdout(), 1<<16)
	if err := table.print(out, header); err != nil {
		return fmt.Errorf("print the table: %w", err)
	}
	if err := out.Flush(); err != nil {
		return fmt.Errorf("print the table: %w", err)
	}
	if f.figure != "" {
		if err := picture.write(f.figure, &f.options); err != nil {
			return err
		}
	}
	if bad > 0 {
		return fmt.Errorf("%s: %d of %d rows could not be answered", path, bad, len(table.rows))
	}
	return nil
}

// readRow is a row as it was read, with its answer or with what is wrong with it. fields are only
// good until the next row.
type readRow struct {
	line   int
	fields []string
	answer exactAnswer
	err    error
}

// readTable reads and answers every row and gives it to each; what the columns don't say is
// taken from q. An error is of the table as a whole, a row's own stays with the row.
func readTable(in io.Reader, q question, o exactOptions, each func(header []string, row readRow) error) ([]string, error) {
	r := csv.NewReader(in)
	r.Comment, r.FieldsPerRecord, r.TrimLeadingSpace = '#', -1, true
	header, err := r.Read()
	switch {
	case errors.Is(err, io.EOF):
		return nil, errors.New("the table is empty: it needs a header with events and exposure (or trials)")
	case err != nil:
		return nil, fmt.Errorf("read the header: %w", err)
	}
	header[0] = strings.TrimPrefix(header[0], "\ufeff")
	columns, err := columnsOf(header, q)
	if err != nil {
		return nil, err
	}
	r.ReuseRecord = true
	for {
		fields, err := r.Read()
		var broken *csv.ParseError
		row := readRow{fields: fields}
		switch {
		case errors.Is(err, io.EOF):
			return header, nil
		case errors.As(err, &broken):
			row = readRow{line: broken.Line, err: fmt.Errorf("not readable as CSV: %w", broken.Err)}
		case err != nil:
			return nil, fmt.Errorf("read the table: %w", err)
		case len(fields) != len(header):
			row.err = fmt.Errorf("%d fields under %d columns", len(fields), len(header))
		default:
			row.answer, row.err = columns.answer(fields, q, o)
		}
		if broken == nil {
			row.line, _ = r.FieldPos(0)
		}
		if err := each(header, row); err != nil {
			return nil, err
		}
	}
}

// tableColumns says where each known column is.
type tableColumns map[string]int

func columnsOf(header []string, q question) (tableColumns, error) {
	known := []string{
		colUnit, colEvents, colExposure, colTrials, colBaseline, colReferenceEvents, colReferenceExposure, colReferenceTrials, colMargin,
	}
	cols := tableColumns{}
	for i, h := range header {
		name := strings.ToLower(strings.TrimSpace(h))
		if !slices.Contains(known, name) {
			if slices.Contains(addedColumns, name) {
				return nil, fmt.Errorf("the header has a column %s already, which would be added: rename it", name)
			}
			continue
		}
		if _, twice := cols[name]; twice {
			return nil, fmt.Errorf("the header has the column %s twice", name)
		}
		cols[name] = i
	}
	has := func(name string) bool { _, ok := cols[name]; return ok }
	switch {
	case !has(colEvents):
		return nil, fmt.Errorf("the header needs a column events; it has %s", strings.Join(header, ", "))
	case has(colExposure) && has(colTrials):
		return nil, errors.New("the header has exposure and trials: a table is of rates or of proportions")
	case has(colReferenceExposure) && has(colReferenceTrials):
		return nil, errors.New("the header has reference_exposure and reference_trials: a table is of rates or of proportions")
	case !has(colExposure) && !has(colTrials) && !q.hasSize:
		return nil, fmt.Errorf("the header needs a column exposure or trials; it has %s", strings.Join(header, ", "))
	}
	return cols, nil
}

// answer reads one row over the question that the options pose.
func (t tableColumns) answer(fields []string, q question, o exactOptions) (exactAnswer, error) {
	text := func(name string) (string, bool) {
		i, ok := t[name]
		if !ok {
			return "", false
		}
		s := strings.TrimSpace(fields[i])
		return s, s != ""
	}
	whole := func(name string, to *int64) (bool, error) {
		s, ok := text(name)
		if !ok {
			return false, nil
		}
		v, err := strconv.ParseInt(s, 10, 64)
		if err != nil {
			return false, fmt.Errorf("%s is %q: give a whole number", name, s)
		}
		*to = v
		return true, nil
	}
	decimal := func(name string, to *float64) (bool, error) {
		s, ok := text(name)
		if !ok {
			return false, nil
		}
		v, err := strconv.ParseFloat(s, 64)
		if err != nil || math.IsNaN(v) {
			return false, fmt.Errorf("%s is %q: give a number, with a point for its decimals", name, s)
		}
		*to = v
		return true, nil
	}
	var errs [8]error
	var got [8]bool
	got[0], errs[0] = whole(colEvents, &q.events)
	got[1], errs[1] = decimal(colExposure, &q.size)
	got[2], errs[2] = decimal(colTrials, &q.size)
	got[3], errs[3] = decimal(colBaseline, &q.baseline)
	got[4], errs[4] = whole(colReferenceEvents, &q.refEvents)
	got[5], errs[5] = decimal(colReferenceExposure, &q.reference)
	got[6], errs[6] = decimal(colReferenceTrials, &q.reference)
	_, errs[7] = decimal(colMargin, &q.margin)
	for _, err := range errs {
		if err != nil {
			return exactAnswer{}, err
		}
	}
	q.hasEvents = got[0]
	q.hasSize = q.hasSize || got[1] || got[2]
	q.proportion = q.proportion && !got[1] || got[2]
	q.hasBaseline = q.hasBaseline || got[3]
	q.hasReference = q.hasReference || got[4]
	q.hasRefSize = q.hasRefSize || got[5] || got[6]
	q.refProportion = q.refProportion && !got[5] || got[6]
	return o.answer(q)
}

func newExactTable(o exactOptions, asJSON bool) *exactTable {
	t := &exactTable{options: o, json: asJSON}
	t.csv = csv.NewWriter(&t.line)
	return t
}

// add encodes a row.
func (t *exactTable) add(header []string, r readRow) error {
	row := exactRow{line: r.line, p: math.NaN(), err: r.err}
	if r.err == nil {
		row.p = r.answer.p
		if exact.AtMost(row.p, t.options.alpha) {
			q := r.answer.question
			row.ask = &q
		}
	}
	t.line.Reset()
	encode := t.encodeCSV
	if t.json {
		encode = t.encodeJSON
	}
	if err := encode(header, r); err != nil {
		return err
	}
	if cap(t.chunk)-len(t.chunk) < t.line.Len() {
		t.chunk = make([]byte, 0, max(1<<20, t.line.Len()))
	}
	from := len(t.chunk)
	t.chunk = append(t.chunk, t.line.Bytes()...)
	row.text = t.chunk[from:len(t.chunk):len(t.chunk)]
	t.rows = append(t.rows, row)
	return nil
}

// encodeCSV writes the row's own fields and the added ones that it knows by itself.
func (t *exactTable) encodeCSV(header []string, r readRow) error {
	record := append(t.record[:0], r.fields...)
	if len(record) > len(header) {
		record = record[:len(header)]
	}
	for len(record) < len(header) {
		record = append(record, "")
	}
	if a, o := &r.answer, t.options; r.err == nil {
		critical := ""
		if a.hasCritical {
			critical = strconv.FormatInt(a.critical, 10)
		}
		record = append(record, cell(a.p), cell(a.log10P), cell(a.rate*o.per), cell(a.rateLower*o.per), cell(a.rateUpper*o.per),
			cell(a.ratio), cell(a.ratioLower), cell(a.ratioUpper), critical, cell(a.attained))
	} else {
		for range rowColumns {
			record = append(record, "")
		}
	}
	t.record = record
	return t.writeRecord(record)
}

// writeRecord puts a record on the line, without its end.
func (t *exactTable) writeRecord(record []string) error {
	if err := t.csv.Write(record); err != nil {
		return err
	}
	t.csv.Flush()
	t.line.Truncate(t.line.Len() - 1)
	return t.csv.Error()
}

// encodeJSON writes the row's object, open at its end.
func (t *exactTable) encodeJSON(header []string, r readRow) error {
	o := t.options
	record := exactRecord{Per: o.per, Alpha: o.alpha, Limit: o.limit, Tail: o.tailName(), MidP: o.mid}
	if r.err == nil {
		record = r.answer.record(o)
	} else {
		record.Problem = r.err.Error()
	}
	unit := slices.IndexFunc(header, func(h string) bool { return strings.EqualFold(strings.TrimSpace(h), colUnit) })
	if record.Line = r.line; unit >= 0 && unit < len(r.fields) {
		record.Unit = r.fields[unit]
	}
	b, err := json.Marshal(record)
	if err != nil {
		return err
	}
	t.line.Write(b[:len(b)-1])
	return nil
}

// print writes the rows with what follows from all of them.
func (t *exactTable) print(w io.Writer, header []string) error {
	p := make([]float64, len(t.rows))
	for i, r := range t.rows {
		p[i] = r.p
	}
	over := overAll{
		holm: exact.Holm(nil, p), hochberg: exact.Hochberg(nil, p),
		bh: exact.BenjaminiHochberg(nil, p), by: exact.BenjaminiYekutieli(nil, p),
	}
	_, over.alpha = exact.FalseCoverage(over.bh, t.options.alpha)
	if !t.json {
		t.line.Reset()
		if err := t.writeRecord(append(slices.Clone(header), addedColumns...)); err != nil {
			return err
		}
		if _, err := w.Write(append(t.line.Bytes(), '\n')); err != nil {
			return err
		}
	}
	for i, r := range t.rows {
		t.line.Reset()
		t.line.Write(r.text)
		if err := t.finish(r, over, i); err != nil {
			return err
		}
		t.line.WriteByte('\n')
		if _, err := w.Write(t.line.Bytes()); err != nil {
			return err
		}
	}
	return nil
}

// overAll is what follows from all rows: the p-values adjusted for their number,
// and the alpha of the bounds of the rows selected.
type overAll struct {
	holm, hochberg, bh, by []float64
	alpha                  float64
}

// finish adds what is known only over all rows, and what is wrong with the row.
func (t *exactTable) finish(r exactRow, over overAll, i int) error {
	bounds, err := t.selected(r, over, i)
	if err != nil {
		return err
	}
	if t.json {
		if !math.IsNaN(r.p) {
			for _, c := range []struct {
				name string
				v    float64
			}{{"holm_p", over.holm[i]}, {"bh_p", over.bh[i]}, {"hochberg_p", over.hochberg[i]}, {"by_p", over.by[i]}} {
				t.line.WriteString(`,"` + c.name + `":` + cell(c.v))
			}
		}
		if bounds != nil {
			b, err := json.Marshal(bounds)
			if err != nil {
				return err
			}
			t.line.WriteByte(',')
			t.line.Write(b[1 : len(b)-1])
		}
		t.line.WriteByte('}')
		return nil
	}
	problem := ""
	if r.err != nil {
		problem = r.err.Error()
	}
	record := append(t.record[:0], cell(over.holm[i]), cell(over.bh[i]), cell(over.hochberg[i]), cell(over.by[i]))
	t.record = append(append(record, bounds.cells()...), problem)
	t.line.WriteByte(',')
	return t.writeRecord(t.record)
}

// cell is a number in full, or nothing.
func cell(v float64) string {
	if math.IsNaN(v) {
		return ""
	}
	return strconv.FormatFloat(v, 'g', -1, 64)
}
