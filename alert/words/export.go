package words

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

// Exporter writes out whole records of alerts, one after the other, then End.
type Exporter interface {
	Write(r *life.Record) error
	End() error
}

// NewExporter returns one that writes CSV, a line for every step and act, or
// JSON, an array of the records themselves. Times are UTC. An error says that
// the form is neither.
func NewExporter(form string, w io.Writer) (Exporter, error) {
	switch form {
	case "csv":
		return &csvExporter{w: csv.NewWriter(w)}, nil
	case "json":
		return &jsonExporter{w: w}, nil
	}
	return nil, fmt.Errorf("%q is no form of an export: it is csv or json", form)
}

// jsonExporter writes an array of records, one a line.
type jsonExporter struct {
	w     io.Writer
	began bool
}

func (e *jsonExporter) Write(r *life.Record) error {
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

func (e *jsonExporter) End() error {
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

func (e *csvExporter) Write(r *life.Record) error {
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

func (e *csvExporter) End() error {
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
		r.ID, r.Series, r.Indicator, string(r.Direction), strconv.Itoa(r.Number), utcTime(r.OpenedAt()), strconv.FormatBool(r.Late),
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
