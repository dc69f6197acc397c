package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"io"
	"os"
	"slices"
	"strings"
	"time"

	"github.com/spf13/cobra"

	"tailbell/config"
	"tailbell/ingest/history"
	"tailbell/monitor"
	"tailbell/monitor/estimate"
	"tailbell/monitor/partition"
	"tailbell/monitor/store"
)

type baselineOptions struct {
	config, indicator, from, to string
	write, figure               string
	asJSON                      bool
	seed                        uint64
	resamples, block            int
	files                       historyFlags
}

// newBaselineCommand returns "tailbell baseline": from history to what is
// usual.
func newBaselineCommand() *cobra.Command {
	var o baselineOptions
	c := &cobra.Command{
		Use:   "baseline [HISTORY...]",
		Short: "Estimate the usual rate of an indicator from its history, and how sure it is",
		Long: `Estimates the usual rate of an indicator, with exact bounds, from files of
history or, without any, from the store of the set-up (a running daemon makes a
copy of it first). Corrections, moves and retractions count as they do in the daemon.

It says whether chance alone explains how the counts spread, whether series,
weekdays or months differ, which periods the rate hangs on, and how late events
are reported; p-values are exact given the totals, enumerated where that can be
done, else simulated from --seed with exact bounds. It ends with a
recommendation and a baseline for the set-up, which --write adds to it.

Rows of files that can't be used are named and left out; the command then fails
in the end, as replay does.

Where an excess was found to be real, leave its whole calendar span out with
--from and --to. Leaving out what merely rang makes the usual rate too low.`,
		Example: `  tailbell baseline --config quillmere.toml --indicator fall falls-2024.csv falls-2025.csv
  tailbell baseline --config quillmere.toml --indicator fall --figure falls.svg --write quillmere.toml falls.csv`,
		RunE: func(c *cobra.Command, args []string) error {
			return baseline(c.Context(), &o, args, c.InOrStdin(), c.OutOrStdout(), c.ErrOrStderr())
		},
	}
	addConfigFlag(c, &o.config)
	o.files.add(c)
	f := c.Flags()
	f.Lookup("series").Usage = "only series that match the `PATTERN`, which the baseline then serves; also the series of CSV files without a series column"
	f.StringVar(&o.indicator, "indicator", "", "the indicator's `NAME`, if the set-up has several")
	f.StringVar(&o.from, "from", "", "only slots from this `DATE` on (in the indicator's zone), or RFC 3339 time")
	f.StringVar(&o.to, "to", "", "only slots before this `DATE` or time; it may lie beyond the last message, if it is known that nothing came")
	f.Uint64Var(&o.seed, "seed", 1, "the seed, a `NUMBER`, of all that is simulated")
	f.IntVar(&o.resamples, "resamples", 10_000, "the `NUMBER` of draws for each simulated p-value and for the bootstrap")
	f.IntVar(&o.block, "block", 0, "the `NUMBER` of periods that the bootstrap keeps together; 0 chooses it")
	f.BoolVar(&o.asJSON, "json", false, "print the whole report as JSON")
	f.StringVar(&o.write, "write", "", "also write the set-up with the new baseline to this `FILE`, which may be the set-up itself")
	f.StringVar(&o.figure, "figure", "", "also draw counts and windows to this `FILE`, .svg or .png")
	return c
}

func baseline(ctx context.Context, o *baselineOptions, paths []string, stdin io.Reader, stdout, stderr io.Writer) error {
	if o.resamples < 100 || o.resamples > 10_000_000 || o.block < 0 {
		return &usageError{errors.New("--resamples is from 100 to 10,000,000, --block not negative")}
	}
	if err := checkFigure(o.figure); err != nil {
		return err
	}
	setup, err := loadSetup(o.config)
	if err != nil {
		return err
	}
	in, err := chooseIndicator(setup, o.indicator)
	if err != nil {
		return err
	}
	span, err := o.span(in)
	if err != nil {
		return err
	}
	d := baselineData{in: in, reports: newReports(in)}
	if len(paths) > 0 {
		err = d.fromFiles(ctx, o, setup, paths, stdin, stderr)
	} else {
		err = d.fromStores(setup)
		if errors.Is(err, store.ErrInUse) {
			err = d.fromDaemon(ctx, o.config, setup)
		}
	}
	if err != nil {
		return err
	}
	for _, begins := range d.begins {
		if err := say(stderr, "%s What was let go is in none of these figures.", begins); err != nil {
			return err
		}
	}
	r, h, err := d.analyse(ctx, o, span, stderr)
	if err != nil {
		return err
	}
	edit, err := addBaseline(setup, in, r, o.files.series)
	if err != nil {
		return err
	}
	if o.asJSON {
		err = writeJSON(stdout, baselineJSON{r, edit.stanza})
	} else {
		err = printBaseline(stdout, h, r, edit.stanza)
	}
	if o.figure != "" && err == nil {
		err = drawBaseline(o.figure, h, r)
	}
	if o.write != "" && err == nil {
		err = edit.write(o.write, o.config)
		if err == nil {
			err = sayWritten(stderr, o, in)
		}
	}
	if d.faults > 0 && err == nil {
		err = errReported
	}
	return err
}

// sayWritten says which series the new baseline serves.
func sayWritten(stderr io.Writer, o *baselineOptions, in *config.Indicator) error {
	text := ""
	if n := len(in.Baselines) - 1; n > 0 && o.files.series == "" {
		text = " Baselines before it still serve the series that they name."
	}
	return say(stderr, "%s now has this baseline.%s", o.write, text)
}

// baselineJSON is the report with the stanza as it can be pasted.
type baselineJSON struct {
	*estimate.Report
	Text string `json:"stanza_text"`
}

func chooseIndicator(setup *config.Setup, name string) (*config.Indicator, error) {
	var names []string
	for i := range setup.Indicators {
		in := &setup.Indicators[i]
		if in.Name == name || (name == "" && len(setup.Indicators) == 1) {
			return in, nil
		}
		names = append(names, in.Name)
	}
	if name == "" {
		return nil, &usageError{fmt.Errorf("which indicator? Say --indicator %s", strings.Join(names, " or "))}
	}
	return nil, &usageError{fmt.Errorf("the set-up has no indicator %q, only %s", name, strings.Join(names, ", "))}
}

func (o *baselineOptions) span(in *config.Indicator) (s estimate.Span, err error) {
	if s.From, err = moment(o.from, in.Zone); err != nil {
		return s, &usageError{fmt.Errorf("--from: %w", err)}
	}
	if s.To, err = moment(o.to, in.Zone); err != nil {
		return s, &usageError{fmt.Errorf("--to: %w", err)}
	}
	return s, nil
}

// moment reads a date in a zone, or an RFC 3339 time; "" is the zero time.
func moment(text string, zone *time.Location) (time.Time, error) {
	if text == "" {
		return time.Time{}, nil
	}
	if t, err := time.ParseInLocation(time.DateOnly, text, zone); err == nil {
		return t, nil
	}
	t, err := time.Parse(time.RFC3339, text)
	if err != nil {
		return t, fmt.Errorf("%q is neither a date such as 2025-12-31 nor a time such as 2025-12-31T08:00:00+01:00", text)
	}
	return t, nil
}

// baselineData is what an estimate is made from.
type baselineData struct {
	in      *config.Indicator
	sums    []monitor.SlotSum
	clock   monitor.Instant
	reports *estimate.Reports
	// only, if not nil, names the series whose delay is asked for.
	only *config.Pattern
	// timed is set if some observation says when it was reported.
	timed bool
	// faults is how many rows of the files can't be used; they were named.
	faults int
	// begins says of stores from when on they have slots, where they lack some.
	begins []string
}

func newReports(in *config.Indicator) *estimate.Reports {
	cal := monitor.NewCalendar(in.Every, in.Zone)
	return estimate.NewReports(func(at monitor.Instant) monitor.Instant { return cal.Start(cal.Slot(at) + 1) })
}

// fromFiles runs the engine over files of history.
func (d *baselineData) fromFiles(ctx context.Context, o *baselineOptions, setup *config.Setup, paths []string, stdin io.Reader, stderr io.Writer) error {
	files := o.files
	if strings.Contains(files.series, "*") {
		files.series = "" // a pattern, not the name for a file without a column
	}
	if o.files.series != "" {
		only := config.NewPattern(o.files.series)
		d.only = &only
	}
	h, err := files.read(ctx, setup, paths, stdin, stderr)
	if err != nil {
		return err
	}
	d.faults = h.Counts.Faults
	e := monitor.New(monitor.Partition{Of: 1, KeyParts: setup.KeyParts})
	e.Apply(&monitor.Message{Position: 1, Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
	return d.run(ctx, e, h, stderr)
}

func (d *baselineData) run(ctx context.Context, e *monitor.Engine, h *history.History, stderr io.Writer) error {
	bar := newBar(stderr, int64(len(h.Entries)), "counting")
	defer bar.end()
	refused, first, n := 0, monitor.Refusal{}, 0
	for m := range h.Messages(1) {
		e.Apply(&m)
		for i := range m.Items {
			if x := &m.Items[i]; x.Reason == "" && d.in.Matches(x.Observation.Series) {
				if d.only == nil || d.only.Match(x.Observation.Series) {
					site, _, _ := strings.Cut(x.Observation.Series, "/")
					d.reports.Add(site, &x.Observation)
				}
				d.timed = d.timed || x.Observation.HasReported
			}
		}
		if n++; n%512 != 0 && n != len(h.Entries) {
			continue
		}
		bar.set(int64(n), 0)
		if err := ctx.Err(); err != nil {
			return err
		}
		changes := e.Drain()
		if err := d.archive(changes.Archived); err != nil {
			return err
		}
		if len(changes.Refused) > 0 && refused == 0 {
			first = changes.Refused[0]
		}
		refused += len(changes.Refused)
	}
	d.sums = append(d.sums, e.Slots()...)
	d.clock = e.Clock()
	if !d.timed {
		// Files that don't tell when rows became known have nothing late in
		// them: slots that have ended are complete.
		d.clock = d.clock.Add(d.in.Settle)
	}
	if refused > 0 {
		return say(stderr, "%d rows were refused and are not counted; the first: %s %s: %s", refused, first.Series, first.Reason, first.Detail)
	}
	return nil
}

// archive takes slots that left the engine's memory.
func (d *baselineData) archive(slots []monitor.ArchivedSlot) error {
	for i := range slots {
		var s monitor.SlotSum
		if err := json.Unmarshal(slots[i].Data, &s); err != nil {
			return fmt.Errorf("an archived slot can't be read: %w", err)
		}
		if d.in.Matches(s.Series) {
			d.sums = append(d.sums, s)
		}
	}
	return nil
}

// fromStores reads what a daemon has counted. Report times are not kept in a
// store, so there is no delay to estimate.
func (d *baselineData) fromStores(setup *config.Setup) error {
	d.clock = monitor.Beginning
	return lookAside(setup, func(st *store.Store) error {
		begins, err := archiveBegins(st)
		if err == nil && begins != "" {
			d.begins = append(d.begins, begins)
		}
		if err == nil {
			err = st.Archived(func(a monitor.ArchivedSlot) error { return d.archive([]monitor.ArchivedSlot{a}) })
		}
		if err != nil {
			return err
		}
		e, err := partition.Recover(st)
		if err != nil {
			return err
		}
		d.sums = append(d.sums, e.Slots()...)
		d.clock = max(d.clock, e.Clock())
		return nil
	})
}

// fromDaemon reads copies of the stores that the running daemon makes.
func (d *baselineData) fromDaemon(ctx context.Context, path string, setup *config.Setup) (err error) {
	folder, err := os.MkdirTemp("", "tailbell-baseline-")
	if err != nil {
		return err
	}
	defer func() { err = errors.Join(err, os.RemoveAll(folder)) }()
	if err := (copier{ctx, io.Discard, path}).all(setup.Folder, folder); err != nil {
		return fmt.Errorf("the running daemon can't copy its store: %w", err)
	}
	copied := *setup
	copied.Folder = folder
	d.sums, d.begins = nil, nil
	return d.fromStores(&copied)
}

func (d *baselineData) analyse(ctx context.Context, o *baselineOptions, span estimate.Span, stderr io.Writer) (*estimate.Report, *estimate.History, error) {
	span.Clock = d.clock
	h, err := estimate.Gather(d.in, d.sums, span)
	if err == nil && o.files.series != "" {
		h, err = h.Select(config.NewPattern(o.files.series).Match)
	}
	if errors.Is(err, estimate.ErrNothing) {
		return nil, nil, fmt.Errorf("%s: %w%s", d.in.Name, err, d.seriesSeen())
	}
	if err != nil {
		return nil, nil, err
	}
	bar := newBar(stderr, 1, "estimating")
	defer bar.end()
	r, err := estimate.Analyse(ctx, h, estimate.Options{
		Seed: o.seed, Draws: o.resamples, Block: o.block, Pattern: o.files.series,
		Reports: d.reports.All(), Now: d.clock,
		Progress: func(done, total int) { bar.set(int64(done), int64(total)) },
	})
	return r, h, err
}

// seriesSeen says which series of the indicator there are at all.
func (d *baselineData) seriesSeen() string {
	var names []string
	for _, s := range d.sums {
		if d.in.Matches(s.Series) {
			names = append(names, s.Series)
		}
	}
	slices.Sort(names)
	names = slices.Compact(names)
	switch {
	case len(names) == 0:
		return ". No series of this indicator was seen; its patterns are " + patternsOf(d.in)
	case len(names) > 10:
		return fmt.Sprintf(". There are %d series, among them %s", len(names), strings.Join(names[:10], ", "))
	}
	return ". There are " + strings.Join(names, ", ")
}

func patternsOf(in *config.Indicator) string {
	texts := make([]string, len(in.Series))
	for i, p := range in.Series {
		texts[i] = p.String()
	}
	return strings.Join(texts, ", ")
}
