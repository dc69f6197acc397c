package main

import (
	"encoding/csv"
	"encoding/json"
	"fmt"
	"io"
	"strconv"
	"strings"
	"time"

	"tailbell/monitor/life"
)

// exporter writes records in a form.
type exporter interface {
	write(r *life.Record) error
	end() error
}

func newExporter(format string, w io.Writer) (exporter, error) {
	switch format {
	case "csv":
		return &csvExporter{w: csv.NewWriter(w)}, nil
	case "json":
		return &jsonExporter{w: w}, nil
	}
	return nil, fmt.Errorf("--format %q: it is csv or json", format)
}

// jsonExporter writes an array of records, one a line.
type jsonExporter struct {
	w     io.Writer
	began bool
}

func (e *jsonExporter) write(r *life.Record) error {
	data, err := json.Marshal(r)
	if err != nil {
		return fmt.Errorf("encoding alert %s: %w", r.ID, err)
	}
	before := ",\n"
	if !e.began {
		before = "[\n"
	}
	e.began = true
	_, err = fmt.Fprintf(e.w, "%s%s", before, data)
	return err
}

func (e *jsonExporter) end() error {
	text := "\n]\n"
	if !e.began {
		text = "[]\n"
	}
	_, err := io.WriteString(e.w, text)
	return err
}

// exportColumns are those of the CSV.
var exportColumns = []string{
	"alert", "series", "indicator", "direction", "number", "opened", "late", "condition_now", "mark_now",
	"step", "kind", "at", "condition", "by", "why", "mark", "until",
	"window", "from", "to", "events", "exposure", "unit", "expected", "p", "log10_p", "critical_count",
}

// csvExporter writes a line for every step.
type csvExporter struct {
	w     *csv.Writer
	began bool
}

func (e *csvExporter) begin() error {
	if e.began {
		return nil
	}
	e.began = true
	return e.w.Write(exportColumns)
}

func (e *csvExporter) write(r *life.Record) error {
	if err := e.begin(); err != nil {
		return err
	}
	for i := range r.Steps {
		if err := e.w.Write(exportLine(r, &r.Steps[i])); err != nil {
			return err
		}
	}
	e.w.Flush()
	return e.w.Error()
}

func (e *csvExporter) end() error {
	if err := e.begin(); err != nil {
		return err
	}
	e.w.Flush()
	return e.w.Error()
}

func exportLine(r *life.Record, s *life.Step) []string {
	until := ""
	if s.Until != nil {
		until = utcTime(*s.Until)
	}
	line := []string{
		r.ID, r.Series, r.Indicator, string(r.Direction), strconv.Itoa(r.Number), utcTime(r.Opened), strconv.FormatBool(r.Late),
		string(r.Condition), string(r.Mark),
		strconv.Itoa(s.Number), string(s.Kind), utcTime(s.At), string(s.Condition), harmless(s.By), harmless(s.Why), string(s.Mark), until,
	}
	ev := s.Evidence
	if ev == nil {
		return append(line, make([]string, len(exportColumns)-len(line))...)
	}
	exactly := func(f float64) string { return strconv.FormatFloat(f, 'g', -1, 64) }
	return append(line, ev.Window, utcTime(ev.From), utcTime(ev.To), strconv.FormatInt(ev.Events, 10), ev.Exposure, ev.Unit,
		exactly(ev.Expected), exactly(ev.P), exactly(ev.Log10P), strconv.FormatInt(ev.Critical, 10))
}

func utcTime(t time.Time) string { return t.UTC().Format(time.RFC3339Nano) }

// harmless keeps a spreadsheet from taking what a person wrote for a formula.
func harmless(text string) string {
	if text != "" && strings.ContainsRune("=+-@\t\r", rune(text[0])) {
		return "'" + text
	}
	return text
}
