package main

import (
	"bufio"
	"encoding/csv"
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
	"critical_count", "attained_size", "holm_p", "bh_p", "problem",
}

// exactRow is one row of a table with its answer, or with what is wrong with it.
type exactRow struct {
	line   int
	fields []string
	answer exactAnswer
	err    error
}

func (f *exactFlags) answerTable(c *cobra.Command, path string) (err error) {
	if f.hasEvents {
		return &usageError{errors.New("--events goes with one question, not with a table: its events are a column")}
	}
	in := c.InOrStdin()
	if path != "-" {
		file, err := os.Open(path)
		if err != nil {
			return fmt.Errorf("open the table: %w", err)
		}
		defer func() { err = errors.Join(err, file.Close()) }()
		in = file
	}
	header, rows, err := readTable(bufio.NewReaderSize(in, 1<<16), f.question, f.options)
	if err != nil {
		return fmt.Errorf("%s: %w", path, err)
	}
	bad := 0
	for i := range rows {
		if rows[i].err == nil {
			continue
		}
		bad++
		if _, err := fmt.Fprintf(c.ErrOrStderr(), "%s: line %d: %v\n", path, rows[i].line, rows[i].err); err != nil {
			return fmt.Errorf("report a row: %w", err)
		}
	}
	out := bufio.NewWriterSize(c.OutOrStdout(), 1<<16)
	if err := f.writeTable(out, header, rows); err != nil {
		return err
	}
	if err := out.Flush(); err != nil {
		return fmt.Errorf("print the table: %w", err)
	}
	if bad > 0 {
		return fmt.Errorf("%s: %d of %d rows could not be answered", path, bad, len(rows))
	}
	return nil
}

// readTable reads and answers every row; what the columns don't say is taken from q. An error is
// of the table as a whole, a row's own stays with the row.
func readTable(in io.Reader, q question, o exactOptions) (header []string, rows []exactRow, err error) {
	r := csv.NewReader(in)
	r.Comment, r.FieldsPerRecord, r.TrimLeadingSpace = '#', -1, true
	header, err = r.Read()
	switch {
	case errors.Is(err, io.EOF):
		return nil, nil, errors.New("the table is empty: it needs a header with events and exposure (or trials)")
	case err != nil:
		return nil, nil, fmt.Errorf("read the header: %w", err)
	}
	header[0] = strings.TrimPrefix(header[0], "\ufeff")
	columns, err := columnsOf(header, q)
	if err != nil {
		return nil, nil, err
	}
	for {
		fields, err := r.Read()
		var broken *csv.ParseError
		switch {
		case errors.Is(err, io.EOF):
			return header, rows, nil
		case errors.As(err, &broken):
			rows = append(rows, exactRow{line: broken.Line, err: fmt.Errorf("not readable as CSV: %w", broken.Err)})
			continue
		case err != nil:
			return nil, nil, fmt.Errorf("read the table: %w", err)
		}
		line, _ := r.FieldPos(0)
		row := exactRow{line: line, fields: fields}
		if len(fields) != len(header) {
			row.err = fmt.Errorf("%d fields under %d columns", len(fields), len(header))
		} else {
			row.answer, row.err = columns.answer(fields, q, o)
		}
		rows = append(rows, row)
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

func (f *exactFlags) writeTable(w io.Writer, header []string, rows []exactRow) error {
	p := make([]float64, len(rows))
	for i := range rows {
		if p[i] = math.NaN(); rows[i].err == nil {
			p[i] = rows[i].answer.p
		}
	}
	holm, bh := exact.Holm(nil, p), exact.BenjaminiHochberg(nil, p)
	if f.json {
		return f.writeTableJSON(w, header, rows, holm, bh)
	}
	out := csv.NewWriter(w)
	if err := out.Write(append(slices.Clone(header), addedColumns...)); err != nil {
		return fmt.Errorf("print the table: %w", err)
	}
	record := make([]string, 0, len(header)+len(addedColumns))
	for i := range rows {
		record = append(record[:0], rows[i].fields...)
		if len(record) > len(header) {
			record = record[:len(header)]
		}
		for len(record) < len(header) {
			record = append(record, "")
		}
		record = rows[i].addTo(record, f.options, holm[i], bh[i])
		if err := out.Write(record); err != nil {
			return fmt.Errorf("print the table: %w", err)
		}
	}
	out.Flush()
	if err := out.Error(); err != nil {
		return fmt.Errorf("print the table: %w", err)
	}
	return nil
}

func (r *exactRow) addTo(record []string, o exactOptions, holm, bh float64) []string {
	if r.err != nil {
		for range len(addedColumns) - 1 {
			record = append(record, "")
		}
		return append(record, r.err.Error())
	}
	a := &r.answer
	critical := ""
	if a.hasCritical {
		critical = strconv.FormatInt(a.critical, 10)
	}
	return append(record, cell(a.p), cell(a.log10P), cell(a.rate*o.per), cell(a.rateLower*o.per), cell(a.rateUpper*o.per),
		cell(a.ratio), cell(a.ratioLower), cell(a.ratioUpper), critical, cell(a.attained), cell(holm), cell(bh), "")
}

// cell is a number in full, or nothing.
func cell(v float64) string {
	if math.IsNaN(v) {
		return ""
	}
	return strconv.FormatFloat(v, 'g', -1, 64)
}

func (f *exactFlags) writeTableJSON(w io.Writer, header []string, rows []exactRow, holm, bh []float64) error {
	unit := slices.IndexFunc(header, func(h string) bool { return strings.EqualFold(strings.TrimSpace(h), colUnit) })
	for i := range rows {
		r := exactRecord{Per: f.options.per, Alpha: f.options.alpha, Limit: f.options.limit, Tail: f.options.tailName(), MidP: f.options.mid}
		if rows[i].err == nil {
			r = rows[i].answer.record(f.options)
			r.HolmP, r.BenjaminiHochberg = orNull(holm[i]), orNull(bh[i])
		} else {
			r.Problem = rows[i].err.Error()
		}
		if r.Line = rows[i].line; unit >= 0 && unit < len(rows[i].fields) {
			r.Unit = rows[i].fields[unit]
		}
		if err := writeJSONLine(w, r); err != nil {
			return err
		}
	}
	return nil
}
