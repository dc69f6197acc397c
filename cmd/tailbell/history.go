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
)

// historyFlags are the options with which files of history are read.
type historyFlags struct {
	format, series, zone string
	ignore               []string
}

func (f *historyFlags) add(c *cobra.Command) {
	c.Flags().StringVar(&f.format, "format", "auto", "auto (by the file's ending), csv or ndjson")
	c.Flags().StringVar(&f.series, "series", "", "the `SERIES` of CSV files without a series column")
	c.Flags().StringVar(&f.zone, "zone", "", "the IANA `ZONE` in which dates without an offset are meant")
	c.Flags().StringSliceVar(&f.ignore, "ignore", nil, "CSV `COLUMNS` to pass over")
}

// read reads the files and tells of every row that can't be used.
func (f *historyFlags) read(ctx context.Context, setup *config.Setup, paths []string, stdin io.Reader, stderr io.Writer) (*history.History, error) {
	format, err := history.ParseFormat(f.format)
	if err != nil {
		return nil, &usageError{err}
	}
	o := history.Options{
		Format: format, Series: f.series, Ignore: f.ignore, Stdin: stdin,
		CheckUnit: unitChecker(setup),
		Limits:    wire.Limits{Observations: setup.Limits.MaxObservations},
	}
	if f.zone != "" {
		if o.Zone, err = config.LoadZone(f.zone); err != nil {
			return nil, &usageError{err}
		}
	}
	bar := newBar(stderr, -1, "reading")
	o.Progress = func(p history.Progress) { bar.set(p.Read, p.Size) }
	h, err := history.Read(ctx, paths, o)
	bar.end()
	if err != nil {
		return nil, err
	}
	for _, fault := range h.Faults {
		if err := say(stderr, "%s", fault); err != nil {
			return nil, err
		}
	}
	return h, nil
}

// unitChecker holds the unit that a file states against the indicator's.
func unitChecker(setup *config.Setup) func(series, unit string) error {
	return func(series, unit string) error {
		for i := range setup.Indicators {
			if in := &setup.Indicators[i]; in.Matches(series) && in.Unit != unit {
				return fmt.Errorf("the file states exposure in %s, but indicator %s counts %s: convert it", unit, in.Name, in.Unit)
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
