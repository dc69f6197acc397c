package history

import (
	"context"
	"errors"
	"fmt"
	"io"
	"os"

	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/replay"
)

// stdin is the path that stands for standard input.
const stdin = "-"

// maxFaultBytes bounds what is kept of a row that can't be used.
const maxFaultBytes = 64 << 10

// reader reads files into one history.
type reader struct {
	opts    Options
	decoder *wire.Decoder
	history *History
	store   arena
	// size of all files in bytes, 0 if not known; done of those before.
	size, done int64
	// latest time of an entry, in all files and in this one.
	latest, latestHere monitor.Instant
	ids                derivedIDs
	lines              *lineReader
	path               string
	scratch            []byte
	offsets            offsetsSeen
}

func newReader(opts Options) *reader {
	return &reader{
		opts:    opts,
		decoder: wire.NewDecoder(opts.Limits),
		history: &History{limits: opts.Limits},
		latest:  monitor.Beginning,
	}
}

// measure sums the sizes of the files for the progress; a size that can't be
// told makes the sum unknown.
func (r *reader) measure(paths []string) {
	for _, path := range paths {
		info, err := os.Stat(path)
		if path == stdin || err != nil || !info.Mode().IsRegular() {
			r.size = 0
			return
		}
		r.size += info.Size()
	}
}

func (r *reader) file(ctx context.Context, path string) (err error) {
	format, err := r.opts.Format.of(path)
	if err != nil {
		return err
	}
	if format == Parquet {
		return r.parquetFile(ctx, path)
	}
	source, err := r.open(path)
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, source.Close()) }()
	r.begin(path, source)
	err = r.rows(ctx, format)
	r.report()
	r.done += r.lines.read
	if err != nil {
		return fmt.Errorf("%s: %w", r.path, err)
	}
	return nil
}

// begin makes the reader ready for another file.
func (r *reader) begin(path string, source io.Reader) {
	r.path, r.lines = path, newLineReader(source)
	if path == stdin {
		r.path = "standard input"
	}
	r.latestHere = monitor.Beginning
	r.ids = newDerivedIDs()
	r.offsets = offsetsSeen{}
}

func (r *reader) open(path string) (io.ReadCloser, error) {
	if path != stdin {
		return os.Open(path)
	}
	if r.opts.Stdin == nil {
		return nil, errors.New("standard input is not there to be read")
	}
	return io.NopCloser(r.opts.Stdin), nil
}

func (r *reader) rows(ctx context.Context, format Format) error {
	var row func() error
	switch format {
	case Parquet:
		return errors.New("a Parquet file is read by its columns") // see file
	case CSV:
		table, err := r.readHeader()
		if err != nil {
			return err
		}
		row = table.row
	case NDJSON, ByEnding:
		if r.lines.beginsWith('[') {
			return errors.New("the file is one JSON array; write its elements without brackets and commas, one a line")
		}
		row = r.jsonLine
	}
	for n := 1; ; n++ {
		if n%4096 == 0 {
			if err := ctx.Err(); err != nil {
				return err
			}
			r.report()
		}
		err := row()
		if errors.Is(err, io.EOF) {
			return nil
		}
		if err != nil {
			return err
		}
	}
}

// report calls the progress function.
func (r *reader) report() {
	if r.opts.Progress == nil {
		return
	}
	c := r.history.Counts
	rows := c.Observations + c.Acts + len(r.history.Faults)
	r.opts.Progress(Progress{File: r.path, Read: r.done + r.lines.read, Size: r.size, Rows: rows})
}

// fault notes a row that can't be used.
func (r *reader) fault(line int, reason monitor.Reason, detail string, raw []byte) {
	kept := append([]byte(nil), raw[:min(len(raw), maxFaultBytes)]...)
	r.history.Faults = append(r.history.Faults, Fault{File: r.path, Line: line, Reason: reason, Detail: detail, Raw: kept})
}

// observation adds a decoded row, or its fault.
func (r *reader) observation(item *monitor.Item, line int, raw []byte) {
	if item.Reason != "" {
		r.fault(line, item.Reason, item.Detail, raw)
		return
	}
	o := &item.Observation
	at := o.HistoryTime()
	if o.Retracted && !o.HasReported {
		at = r.latestHere
		if at == monitor.Beginning {
			r.fault(line, monitor.BadTime, noTimeYet("retraction", "reported"), raw)
			return
		}
	}
	if r.opts.Tape != nil {
		r.tape(o, at, line, raw)
		return
	}
	r.scratch = wire.EncodeObservation(r.scratch[:0], o)
	if o.ID == "" && !o.Reading && !r.opts.NoDerivedIDs {
		r.scratch = r.ids.identify(r.scratch)
		r.history.Counts.DerivedIDs++
	}
	r.history.Counts.Observations++
	r.add(Entry{JSON: r.store.keep(r.scratch), Time: at, File: r.path, Line: line})
}

// act adds a decoded act.
func (r *reader) act(act *monitor.Act, line int, raw []byte) {
	at := act.At
	if !act.HasAt {
		at = r.latestHere
		if at == monitor.Beginning {
			r.fault(line, monitor.BadTime, noTimeYet("act", "at"), raw)
			return
		}
	}
	r.history.Counts.Acts++
	if r.opts.Tape != nil {
		r.latestHere = max(r.latestHere, at)
		r.opts.Tape.AddAct(*act, at, false, replay.Place{File: r.path, Line: line})
		return
	}
	r.scratch = wire.EncodeAct(r.scratch[:0], act)
	r.add(Entry{JSON: r.store.keep(r.scratch), Time: at, File: r.path, Line: line, IsAct: true})
}

func noTimeYet(what, field string) string {
	return fmt.Sprintf("the %s tells no time, and no row above it does; give %s", what, field)
}

func (r *reader) add(e Entry) {
	if e.Time < r.latest {
		r.history.Counts.OutOfOrder++
	}
	r.latest = max(r.latest, e.Time)
	r.latestHere = max(r.latestHere, e.Time)
	r.history.Entries = append(r.history.Entries, e)
}

// jsonLine reads a line of newline-delimited JSON.
func (r *reader) jsonLine() error {
	line, err := r.lines.next()
	if err != nil {
		return err
	}
	switch {
	case line.tooLong:
		r.fault(line.number, monitor.TooLarge, tooLong, line.text)
	case len(line.text) == 0:
	case wire.IsAct(line.text):
		act, reason, detail := r.decoder.Act(line.text)
		if reason != "" {
			r.fault(line.number, reason, detail, line.text)
			return nil
		}
		r.act(&act, line.number, line.text)
	default:
		item := r.decoder.Observation(line.text)
		r.observation(&item, line.number, line.text)
	}
	return nil
}
