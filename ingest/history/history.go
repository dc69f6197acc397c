// Package history reads files of observations and acts into inputs in the
// order in which they became known.
//
// The model:
//   - A file is CSV with documented columns, or newline-delimited JSON in the
//     form of the data contract (ingest/wire). Rows of both pass through the
//     contract's decoder, so the same rules and reason codes hold as on the bus.
//   - A row that can't be used is a Fault with its file, line and bytes; the
//     rest goes on. A file that can't be read at all, such as one with an
//     unknown column, is an error.
//   - Every row becomes an Entry: its canonical JSON, and its history time.
//     Entries are sorted by that time; equal ones keep the order of the files.
//   - A row without an id gets one derived from its content, so that feeding
//     the same file again counts nothing again.
//
// The same entries are published on a bus or replayed without one: Messages
// decodes the very bytes that a publisher sends, with the header time that it
// gives them.
//
// Errors and faults name the options of the commands feed and replay.
//
// Caveat: all entries are held in memory, about 250 bytes each; on a tape
// (Options.Tape) about 60.
package history

import (
	"context"
	"fmt"
	"io"
	"iter"
	"slices"
	"time"

	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/replay"
)

// Options say how files are read. The zero value reads files that explain
// themselves.
type Options struct {
	// Format of all files; by default each file's ending tells.
	Format Format
	// Series is the series of CSV files without a series column.
	Series string
	// Zone is where dates and date-times without an offset are local. Nil
	// refuses them.
	Zone *time.Location
	// Ignore names columns of CSV files that are passed over.
	Ignore []string
	// CheckUnit reports whether the exposure of the series is counted in the
	// unit that a CSV file states in the name of its exposure column. Nil
	// accepts every unit.
	CheckUnit func(series, unit string) error
	// NoDerivedIDs leaves rows without an id as they are.
	NoDerivedIDs bool
	// Tape, if not nil, takes the rows in the place of History.Entries: in a
	// fifth of the memory and of the time, but without their JSON.
	Tape *replay.Tape
	// KeepsIDs, with a Tape, reports whether the ids of the series are kept:
	// where they are not, rows without an id are left as they are. Nil derives
	// ids for all.
	KeepsIDs func(series string) bool
	// ZoneOf, with a Tape, returns the zone in which a series is counted, nil
	// if that is not known: other offsets of time than the zone's are remarked
	// upon where a file has several.
	ZoneOf func(series string) *time.Location
	// Limits of the decoder.
	Limits wire.Limits
	// Stdin is read for the path "-".
	Stdin io.Reader
	// Progress, if not nil, is called now and then, and once at the end of
	// each file.
	Progress func(Progress)
}

// Progress says how far the reading has come.
type Progress struct {
	File string
	// Read bytes of Size, over all files; Size is 0 if it is not known.
	Read, Size int64
	Rows       int
}

// History is what was read.
type History struct {
	// Entries are in the order of their times.
	Entries []Entry
	Faults  []Fault
	Counts  Counts
	limits  wire.Limits
}

// Counts say what was read. Rows is the sum of Observations, Acts and Faults.
type Counts struct {
	Files        int
	Rows         int
	Observations int
	Acts         int
	Faults       int
	// OutOfOrder counts entries with an earlier time than one before them in
	// the order of reading.
	OutOfOrder int
	// DerivedIDs counts rows that were given an id.
	DerivedIDs int
}

// Entry is one row that can be published.
type Entry struct {
	// JSON is the canonical form.
	JSON []byte
	// Time is the history time: when the row became known. It belongs into the
	// header wire.TimeHeader.
	Time monitor.Instant
	File string
	Line int
	// IsAct tells an act from an observation.
	IsAct bool
}

// Kind returns the last token of the subject on which the entry is published.
func (e *Entry) Kind() string {
	if e.IsAct {
		return "act"
	}
	return "obs"
}

// Fault is a row that can't be used.
type Fault struct {
	File   string
	Line   int
	Reason monitor.Reason
	Detail string
	// Raw is the row as it stands in the file, cut to 64 KiB.
	Raw []byte
}

// String returns the fault on one line.
func (f Fault) String() string {
	return fmt.Sprintf("%s:%d: %s: %s", f.File, f.Line, f.Reason, f.Detail)
}

// Read reads the files in the order given; "-" is standard input. The error is
// about a file as a whole, or the context's.
func Read(ctx context.Context, paths []string, opts Options) (*History, error) {
	r := newReader(opts)
	r.measure(paths)
	for _, path := range paths {
		if err := r.file(ctx, path); err != nil {
			return nil, err
		}
	}
	h := r.history
	h.Counts.Files = len(paths)
	h.Counts.Faults = len(h.Faults)
	h.Counts.Rows = h.Counts.Observations + h.Counts.Acts + h.Counts.Faults
	if opts.Tape != nil {
		h.Counts.OutOfOrder = opts.Tape.OutOfOrder()
		opts.Tape.Sort()
		return h, nil
	}
	if h.Counts.OutOfOrder > 0 {
		slices.SortStableFunc(h.Entries, func(a, b Entry) int {
			switch {
			case a.Time < b.Time:
				return -1
			case a.Time > b.Time:
				return 1
			}
			return 0
		})
	}
	return h, nil
}

// Messages returns the entries as the engine would get them from a bus with
// nothing else in it, each in a message of its own: the first has the position
// after+1, and all were stored at their history time.
func (h *History) Messages(after uint64) iter.Seq[monitor.Message] {
	return func(yield func(monitor.Message) bool) {
		d := wire.NewDecoder(h.limits)
		for i := range h.Entries {
			e := &h.Entries[i]
			m := d.Decode(wire.Raw{Position: after + uint64(i) + 1, Stored: e.Time.Time(), Subject: e.Kind(), Data: e.JSON})
			m.Time, m.HasTime = e.Time, true
			if !yield(m) {
				return
			}
		}
	}
}
