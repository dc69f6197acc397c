package main

import (
	"bufio"
	"cmp"
	"encoding/csv"
	"errors"
	"fmt"
	"io"
	"maps"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"sync"
	"time"

	"github.com/parquet-go/parquet-go"

	"tailbell/monitor"
	"tailbell/monitor/replay"
)

// checkLooks refuses a file of looks of a kind that can't be written.
func checkLooks(path string) error {
	switch strings.ToLower(filepath.Ext(path)) {
	case "", ".csv", ".parquet":
		if path == "" || filepath.Ext(path) != "" {
			return nil
		}
	}
	return fmt.Errorf("--looks %s: the file's name must end in .csv or .parquet", path)
}

// lookRow is one look as it is written: absent values are those that do not
// apply.
type lookRow struct {
	Series      string   `parquet:"series,dict"`
	Indicator   string   `parquet:"indicator,dict"`
	Window      string   `parquet:"window,dict"`
	Start       int64    `parquet:"start,timestamp(microsecond)"`
	End         int64    `parquet:"end,timestamp(microsecond)"`
	Due         int64    `parquet:"due,timestamp(microsecond)"`
	Status      string   `parquet:"status,dict"`
	Events      int64    `parquet:"events"`
	Late        int64    `parquet:"late_events"`
	Exposure    string   `parquet:"exposure"`
	Provisional int64    `parquet:"provisional_slots"`
	Expected    *float64 `parquet:"expected,optional"`
	Upper       lookTail `parquet:"upper"`
	Lower       lookTail `parquet:"lower"`
}

type lookTail struct {
	P        *float64 `parquet:"p,optional"`
	Log10P   *float64 `parquet:"log10_p,optional"`
	Limit    *float64 `parquet:"p_limit,optional"`
	Critical *int64   `parquet:"critical_count,optional"`
	Signals  *bool    `parquet:"signals,optional"`
}

var lookColumns = []string{
	"series", "indicator", "window", "start", "end", "due", "status", "events", "late_events", "exposure", "provisional_slots", "expected",
	"upper_p", "upper_log10_p", "upper_p_limit", "upper_critical_count", "upper_signals",
	"lower_p", "lower_log10_p", "lower_p_limit", "lower_critical_count", "lower_signals",
}

func lookRowOf(v *monitor.View) lookRow {
	return lookRow{
		Series: v.Series, Indicator: v.Indicator, Window: v.Window,
		Start: v.Start.UnixMicro(), End: v.End.UnixMicro(), Due: v.Due.UnixMicro(),
		Status: v.Status, Events: v.Events, Late: v.Late, Exposure: v.Exposure.Decimal(v.Digits), Provisional: v.Provisional,
		Expected: known(v.Expected), Upper: lookTailOf(&v.Upper), Lower: lookTailOf(&v.Lower),
	}
}

func lookTailOf(t *monitor.ViewTail) lookTail {
	if !t.Watched || math.IsNaN(t.P) {
		return lookTail{}
	}
	row := lookTail{P: known(t.P), Log10P: known(t.Log10P), Limit: known(t.Limit), Signals: &t.Signals}
	if t.HasCritical {
		row.Critical = &t.Critical
	}
	return row
}

func known(x float64) *float64 {
	if math.IsNaN(x) || math.IsInf(x, 0) {
		return nil
	}
	return &x
}

// looks writes every look of a replay, series by series in the order of the
// history, each in the order of its looks.
type looks struct {
	file   *os.File
	tape   *replay.Tape
	sink   lookSink
	mu     sync.Mutex
	groups map[int]map[string][]lookRow
}

// lookSink is one format of file.
type lookSink interface {
	write(rows []lookRow) error
	close() error
}

func newLooks(path string, tape *replay.Tape) (*looks, error) {
	file, err := os.Create(path)
	if err != nil {
		return nil, fmt.Errorf("--looks: %w", err)
	}
	l := &looks{file: file, tape: tape, groups: map[int]map[string][]lookRow{}}
	if strings.EqualFold(filepath.Ext(path), ".parquet") {
		l.sink = &parquetLooks{parquet.NewGenericWriter[lookRow](file, parquet.Compression(&parquet.Zstd))}
	} else {
		l.sink, err = newCSVLooks(file)
	}
	if err != nil {
		return nil, errors.Join(err, file.Close())
	}
	return l, nil
}

// add takes a look of a group.
func (l *looks) add(group int, v *monitor.View) {
	l.mu.Lock()
	bySeries := l.groups[group]
	if bySeries == nil {
		bySeries = map[string][]lookRow{}
		l.groups[group] = bySeries
	}
	l.mu.Unlock()
	bySeries[v.Series] = append(bySeries[v.Series], lookRowOf(v)) // a group is one goroutine's
}

// done writes the looks of a group that has ended.
func (l *looks) done(group int) error {
	l.mu.Lock()
	bySeries := l.groups[group]
	delete(l.groups, group)
	l.mu.Unlock()
	names := slices.SortedFunc(maps.Keys(bySeries), func(a, b string) int { return cmp.Compare(l.tape.Number(a), l.tape.Number(b)) })
	for _, series := range names {
		if err := l.sink.write(bySeries[series]); err != nil {
			return fmt.Errorf("--looks: %w", err)
		}
	}
	return nil
}

// close ends the file; after a failure what was written of it is removed.
func (l *looks) close(failed error) error {
	err := l.sink.close()
	err = errors.Join(err, l.file.Close())
	if failed != nil || err != nil {
		err = errors.Join(err, os.Remove(l.file.Name()))
	}
	return err
}

type parquetLooks struct {
	w *parquet.GenericWriter[lookRow]
}

func (p *parquetLooks) write(rows []lookRow) error {
	_, err := p.w.Write(rows)
	return err
}

func (p *parquetLooks) close() error { return p.w.Close() }

type csvLooks struct {
	buffer *bufio.Writer
	csv    *csv.Writer
	record []string
}

func newCSVLooks(w io.Writer) (*csvLooks, error) {
	buffer := bufio.NewWriterSize(w, 1<<16)
	c := &csvLooks{buffer: buffer, csv: csv.NewWriter(buffer)}
	return c, c.csv.Write(lookColumns)
}

func (c *csvLooks) write(rows []lookRow) error {
	for i := range rows {
		r := &rows[i]
		whole := func(n int64) string { return strconv.FormatInt(n, 10) }
		c.record = append(c.record[:0], r.Series, r.Indicator, r.Window, utc(r.Start), utc(r.End), utc(r.Due), r.Status,
			whole(r.Events), whole(r.Late), r.Exposure, whole(r.Provisional), optional(r.Expected))
		for _, t := range []*lookTail{&r.Upper, &r.Lower} {
			critical, signals := "", ""
			if t.Critical != nil {
				critical = whole(*t.Critical)
			}
			if t.Signals != nil {
				signals = strconv.FormatBool(*t.Signals)
			}
			c.record = append(c.record, optional(t.P), optional(t.Log10P), optional(t.Limit), critical, signals)
		}
		if err := c.csv.Write(c.record); err != nil {
			return err
		}
	}
	return nil
}

func (c *csvLooks) close() error {
	c.csv.Flush()
	return errors.Join(c.csv.Error(), c.buffer.Flush())
}

func utc(micro int64) string { return time.UnixMicro(micro).UTC().Format(time.RFC3339Nano) }

func optional(x *float64) string {
	if x == nil {
		return ""
	}
	return cell(*x)
}
