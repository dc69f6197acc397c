package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"time"

	"github.com/spf13/cobra"

	"tailbell/alert/outlet"
	"tailbell/config"
	"tailbell/ingest/history"
	"tailbell/monitor"
	"tailbell/monitor/replay"
)

// replayOptions are the options of one run of replay.
type replayOptions struct {
	configs  []string
	files    historyFlags
	json     bool
	looks    string
	known    string
	stream   bool
	from     string
	cores    int
	chances  bool
	rangeOf  history.Range
	setups   []*config.Setup
	tape     *replay.Tape
	read     *history.History
	remarks  replay.Remarks
	stdin    io.Reader
	out, err io.Writer
}

func newReplayCommand() *cobra.Command {
	o := &replayOptions{}
	c := &cobra.Command{
		Use:   "replay [FILE...]",
		Short: "Say what the monitor would have done over files of history, or over its stream",
		Long: `Runs the same engine as the daemon over CSV, newline-delimited JSON or Parquet
files, without a bus and without a store, at their own report times, and prints
every step of every alert: in plain sentences, or with --json as records, one a
line. A summary follows: looks and alerts by indicator, and alerts a year with
exact bounds (Garwood). Nothing is stored and nobody is told. With --stream it
reads, in the place of files, what the bus of the set-up holds: of the daemon that
runs, or at rest; from a position or a time with --from.

The clock moves with the rows, so looks that fall due after the last one are not
made; where the history is complete up to a later time, --until TIME makes those
that are due by then. --looks FILE writes every look: CSV, or Parquet.

With --config given several times the set-ups are compared on the same history:
which excesses each found, how much earlier or later, at how many alerts a year.
--known FILE names the episodes that are known (CSV: series, start, end, and
perhaps direction, note), so that those that none found show too.

A row that can't be used is named with its file and line, as are gaps, rows that
are there twice or out of order, and mixed offsets of time; the rest goes on. The
exit code is 1 if rows were not usable or were refused, 3 if all were used but
something was odd, else 0. Of rows without an id, equal ones count once a file
each: see "tailbell feed --help" on ids.`,
		RunE: func(c *cobra.Command, args []string) error {
			o.stdin, o.out, o.err = c.InOrStdin(), c.OutOrStdout(), c.ErrOrStderr()
			return o.run(c.Context(), args)
		},
	}
	o.files.add(c)
	f := c.Flags()
	f.StringArrayVar(&o.configs, "config", []string{defaultSetup}, "the set-up's `FILE`; given several times, they are compared")
	f.BoolVar(&o.json, "json", false, "write alert steps as JSON records, one a line; or a comparison as one record")
	f.StringVar(&o.looks, "looks", "", "write every look to this `FILE`: .csv or .parquet")
	f.StringVar(&o.known, "known", "", "a `FILE` of all episodes known in the history, to hold a comparison against")
	f.BoolVar(&o.stream, "stream", false, "read the stream on the set-up's bus in the place of files")
	f.StringVar(&o.from, "from", "", "with --stream: begin at this `POSITION`, or at this time (RFC 3339)")
	f.BoolVar(&o.chances, "p-values", false, "compute the p-value of every look, and say how they are spread")
	f.IntVar(&o.cores, "cores", 0, "use so `MANY` cores; 0 for all. The results are the same")
	return c
}

func (o *replayOptions) run(ctx context.Context, args []string) error {
	if err := o.check(args); err != nil {
		return &usageError{err}
	}
	for _, path := range o.configs {
		setup, err := loadSetup(path)
		if err != nil {
			return err
		}
		o.setups = append(o.setups, setup)
	}
	if err := o.readHistory(ctx, args); err != nil {
		return err
	}
	if len(o.setups) > 1 {
		return o.compare(ctx)
	}
	r, took, err := o.play(ctx, o.setups[0], "replaying")
	if err != nil {
		return err
	}
	terminal := outlet.NewTerminal(o.out, widthOf(o.out), o.json)
	for i := range r.Steps {
		if err := terminal.Deliver(ctx, &r.Steps[i]); err != nil {
			return err
		}
	}
	summary := o.out
	if o.json {
		summary = o.err
	}
	if err := o.summarise(summary, r, took); err != nil {
		return err
	}
	return o.verdict(r)
}

// check says what is wrong with the options together.
func (o *replayOptions) check(args []string) error {
	switch {
	case !o.stream && len(args) == 0:
		return errors.New("FILE is missing: tailbell replay FILE..., or --stream for the stream (--help says more)")
	case o.stream && len(args) > 0:
		return errors.New("--stream reads the stream in the place of files: name files, or give --stream")
	case o.from != "" && !o.stream:
		return errors.New("--from goes with --stream")
	case o.known != "" && len(o.configs) < 2:
		return errors.New("--known goes with a comparison: give --config twice; what one set-up finds of known episodes, tailbell rehearse says")
	case o.looks != "" && len(o.configs) > 1:
		return errors.New("--looks goes with one set-up: give --config once")
	case o.cores < 0:
		return fmt.Errorf("--cores %d: give 0 for all, or how many", o.cores)
	}
	return checkLooks(o.looks)
}

// play runs the engine over the history.
func (o *replayOptions) play(ctx context.Context, setup *config.Setup, what string) (r *replay.Result, took time.Duration, err error) {
	bar := newBar(o.err, int64(o.tape.Len()), what)
	defer bar.end()
	opts := replay.Options{Workers: o.cores, Chances: o.chances, Progress: func(done, _ int) { bar.set(int64(done), 0) }}
	if o.files.until != monitor.Beginning {
		opts.Until, opts.HasUntil = o.files.until, true
	}
	if o.looks != "" {
		looks, err := newLooks(o.looks, o.tape)
		if err != nil {
			return nil, 0, err
		}
		defer func() { err = errors.Join(err, looks.close(err)) }()
		opts.Look, opts.Done = looks.add, looks.done
	}
	start := now()
	r, err = replay.Run(ctx, setup, o.tape, opts)
	return r, now().Sub(start), err
}

// verdict tells by the exit code whether all rows were used, and were plain.
func (o *replayOptions) verdict(r *replay.Result) error {
	switch {
	case o.read.Counts.Faults > 0 || len(r.Refused) > 0:
		return errReported
	case len(o.remarks.List) > 0:
		return errOdd
	}
	return nil
}
