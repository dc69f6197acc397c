package main

import (
	"context"
	"fmt"
	"io"
	"time"

	"github.com/schollz/progressbar/v3"
	"github.com/spf13/cobra"

	"tailbell/config"
	"tailbell/ingest/history"
	"tailbell/ingest/wire"
	"tailbell/monitor"
)

// historyFlags are the options with which files of history are read.
type historyFlags struct {
	format, series, zone, untilText string
	ignore                          []string
	// until is the time to which the history is complete, set by read;
	// monitor.Beginning for none.
	until monitor.Instant
	// latest is the latest time that until may be; 0 for any.
	latest monitor.Instant
}

func (f *historyFlags) add(c *cobra.Command) {
	c.Flags().StringVar(&f.format, "format", "auto", "the `FORMAT` of the files: auto (by their endings), csv, ndjson or parquet")
	c.Flags().StringVar(&f.series, "series", "", "the `SERIES` of CSV files without a series column")
	c.Flags().StringVar(&f.zone, "zone", "", "the IANA `ZONE` in which dates and times without an offset are meant")
	c.Flags().StringSliceVar(&f.ignore, "ignore", nil, "CSV `COLUMNS` to pass over")
	c.Flags().StringVar(&f.untilText, "until", "", "move the clock on to this `TIME` after the last row, so that the looks due by then are made: RFC 3339, or a date (its first moment in --zone)")
}

// readOptions reads the options, and says which one is wrong.
func (f *historyFlags) readOptions() (o history.Options, err error) {
	o.Series, o.Ignore = f.series, f.ignore
	if o.Format, err = history.ParseFormat(f.format); err != nil {
		return o, fmt.Errorf("--format: %w", err)
	}
	if f.series != "" {
		if err := config.CheckSeries(f.series); err != nil {
			return o, fmt.Errorf("--series %q: %w", f.series, err)
		}
	}
	if f.zone != "" {
		if o.Zone, err = config.LoadZone(f.zone); err != nil {
			return o, fmt.Errorf("--zone %q: %w", f.zone, err)
		}
	}
	f.until = monitor.Beginning
	if f.untilText != "" {
		if f.until, err = history.ParseTime(f.untilText, o.Zone); err != nil {
			return o, fmt.Errorf("--until: %w", err)
		}
		if f.latest != 0 && f.until > f.latest {
			return o, fmt.Errorf("--until %s lies in the future: the looks up to then would be made before their data are there", f.untilText)
		}
	}
	return o, nil
}

// checkUntil says what is wrong with an end that lies before the row that
// became known last.
func (f *historyFlags) checkUntil(last monitor.Instant, file string, line int) error {
	if f.until == monitor.Beginning || f.until >= last {
		return nil
	}
	return fmt.Errorf("--until %s lies before %s, when the row at %s:%d became known: it names a time after the last row, and leaves none out",
		f.untilText, wire.FormatTime(last), file, line)
}

// read reads the files and tells of every row that can't be used.
func (f *historyFlags) read(ctx context.Context, setup *config.Setup, paths []string, stdin io.Reader, stderr io.Writer) (*history.History, error) {
	o, err := f.readOptions()
	if err != nil {
		return nil, &usageError{err}
	}
	o.Stdin, o.CheckUnit, o.Limits = stdin, unitChecker(setup), wire.Limits{Observations: setup.Limits.MaxObservations}
	bar := newBar(stderr, -1, "reading")
	o.Progress = func(p history.Progress) { bar.set(p.Read, p.Size) }
	h, err := history.Read(ctx, paths, o)
	bar.end()
	if err != nil {
		return nil, err
	}
	if len(h.Entries) > 0 {
		last := &h.Entries[len(h.Entries)-1]
		if err := f.checkUntil(last.Time, last.File, last.Line); err != nil {
			return nil, &usageError{err}
		}
	}
	return h, tellRowFaults(stderr, h)
}

// tellRowFaults names every row that can't be used.
func tellRowFaults(stderr io.Writer, h *history.History) error {
	for _, fault := range h.Faults {
		if err := say(stderr, "%s", fault); err != nil {
			return err
		}
	}
	return nil
}

// unitChecker holds the unit that a file states against the indicator's.
func unitChecker(setup *config.Setup) func(series, unit string) error {
	return func(series, unit string) error {
		for i := range setup.Indicators {
			if in := &setup.Indicators[i]; in.Matches(series) && in.Unit != unit {
				return fmt.Errorf("the file states exposure in %s, but the indicator %s counts %s: convert it, or correct the column's name", unit, in.Name, in.Unit)
			}
		}
		return nil
	}
}

// bar is a progress bar, on a terminal only.
type bar struct{ b *progressbar.ProgressBar }

func newBar(w io.Writer, total int64, what string) bar {
	if !isTerminal(w) {
		return bar{}
	}
	return bar{progressbar.NewOptions64(total,
		progressbar.OptionSetWriter(w), progressbar.OptionSetDescription(what),
		progressbar.OptionThrottle(100*time.Millisecond), progressbar.OptionShowCount(),
		progressbar.OptionClearOnFinish(), progressbar.OptionSetPredictTime(true))}
}

func (b bar) set(done, total int64) {
	if b.b == nil {
		return
	}
	if total > 0 && b.b.GetMax64() != total {
		b.b.ChangeMax64(total)
	}
	// A bar that can't be drawn is no reason to stop.
	if err := b.b.Set64(done); err != nil {
		return
	}
}

func (b bar) end() {
	if b.b == nil {
		return
	}
	if err := b.b.Finish(); err != nil {
		return
	}
}
