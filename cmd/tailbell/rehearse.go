package main

import (
	"context"
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"fmt"
	"io"
	"math"
	"os"
	"slices"
	"strconv"

	"github.com/spf13/cobra"

	"tailbell/config"
	"tailbell/ingest/history"
	"tailbell/monitor"
	"tailbell/monitor/rehearse/plant"
)

type rehearseOptions struct {
	config, against, indicator     string
	ratios, frequencies            []float64
	length, shape                  string
	histories, redraws             int
	seed                           uint64
	years, rate                    float64
	exposure, begin, known, figure string
	drawn, asJSON                  bool
	peers                          int
	files                          historyFlags
	setups                         []*config.Setup
	in                             *config.Indicator
	plan                           *plant.Plan
	faults                         int
	digest                         string
	givenForInvented               bool
}

// newRehearseCommand returns "tailbell rehearse": what would be found, how
// late, at what cost.
func newRehearseCommand() *cobra.Command {
	var o rehearseOptions
	c := &cobra.Command{
		Use:   "rehearse [HISTORY...]",
		Short: "Plant excesses in many histories: what would be found, how late, at what cost in false alerts",
		Long: `Plants an excess in each of many histories, runs the daemon's own engine over
them, and counts what it finds. Histories are invented from the indicator's
baseline, or the given files are taken, and excesses are planted in them on top
of what is there. Everything is drawn from --seed.

An excess multiplies the usual rate by --ratio over --length: from its first
slot to its last ("step"), rising evenly ("ramp"), rising and falling ("hump"),
or coming and going four times ("bursts"). It is found in time if an alert opens by a
window that ends no later than the excess.

Told are, for alerts and for each window: the share found with exact bounds
(Clopper and Pearson), the delay with bounds by the bootstrap, what would have been
seen there without the excess, the false alerts a year and series with exact bounds
(Garwood), and the predictive value of an alert where excesses come so often as
--excesses-a-year says.

A real history holds excesses of its own, so its false alerts are told only if
--known names a file of all known episodes (CSV: series, start, end, and perhaps
direction, note; end is no part of an episode); excesses are then planted away
from these. The alerts over the history as it is are held against them and
against the marks in it: sensitivity, predictive value and timeliness in the sense
of the CDC's guidelines (MMWR 2001;50 RR-13).

With --against a second set-up judges the same planted histories.`,
		Example: `  tailbell rehearse --config quillmere.toml --indicator fall --exposure 22 --ratio 2,3 --length 56d
  tailbell rehearse --config quillmere.toml --indicator fall --known known.csv history.ndjson --json > rehearsal.json`,
		RunE: func(c *cobra.Command, args []string) error {
			o.givenForInvented = c.Flags().Changed("exposure") || c.Flags().Changed("years") || c.Flags().Changed("rate") ||
				c.Flags().Changed("draw-rate") || c.Flags().Changed("peers") || c.Flags().Changed("begin")
			return o.run(c.Context(), args, c.InOrStdin(), c.OutOrStdout(), c.ErrOrStderr())
		},
	}
	addConfigFlag(c, &o.config)
	o.files.add(c)
	o.flags(c)
	return c
}

func (o *rehearseOptions) flags(c *cobra.Command) {
	f := c.Flags()
	f.Lookup("series").Usage = "the `NAME` of the invented series; also the series of CSV files without a series column"
	f.StringVar(&o.against, "against", "", "a second set-up `FILE`, which judges the same histories")
	f.StringVar(&o.indicator, "indicator", "", "the indicator's `NAME`, if the set-up has several")
	f.Float64SliceVar(&o.ratios, "ratio", []float64{1.5, 2, 3}, "the `RATIOS` to the usual rate that are planted; under 1 for fewer events")
	f.StringVar(&o.length, "length", "", "how long an excess lasts: a `SPAN` of whole slots; the longest window unless given")
	f.StringVar(&o.shape, "shape", "step", "the `SHAPE` of an excess: step, ramp, hump or bursts")
	f.IntVar(&o.histories, "histories", 1000, "the `NUMBER` of histories")
	f.IntVar(&o.redraws, "resamples", 1000, "the `NUMBER` of redraws of the bootstrap")
	f.Uint64Var(&o.seed, "seed", 1, "the seed, a `NUMBER`, of everything drawn")
	f.Float64Var(&o.years, "years", 2, "how many `YEARS` of each invented history are looked at, beside what windows and baselines take to fill")
	f.Float64Var(&o.rate, "rate", 0, "the true `RATE` of invented histories, in the indicator's multiple of its unit; the baseline's unless given")
	f.StringVar(&o.exposure, "exposure", "", "the `AMOUNT` of exposure (or trials) in each slot of invented histories")
	f.BoolVar(&o.drawn, "draw-rate", false, "draw each invented history's true rate from what the reference leaves open")
	f.IntVar(&o.peers, "peers", 0, "the `NUMBER` of other series in invented histories, for a baseline from peers, or an allowance over all series")
	f.StringVar(&o.begin, "begin", "", "the `DATE` on which invented histories begin")
	f.Float64SliceVar(&o.frequencies, "excesses-a-year", []float64{0.1, 1}, "how many excesses come a year and series, for predictive values: `NUMBERS`")
	f.StringVar(&o.known, "known", "", "a `FILE` of all episodes known in the given history")
	f.BoolVar(&o.asJSON, "json", false, "print the whole result as JSON, which tailbell report --rehearsal reads")
	f.StringVar(&o.figure, "figure", "", "also draw shares and delays to this `FILE`, .svg or .png")
}

func (o *rehearseOptions) run(ctx context.Context, paths []string, stdin io.Reader, stdout, stderr io.Writer) error {
	if err := o.check(paths); err != nil {
		return err
	}
	r, err := o.prepare(ctx, paths, stdin, stderr)
	if err != nil {
		return err
	}
	bar := newBar(stderr, int64(o.histories), "rehearsing")
	o.plan.Progress = func(done int) { bar.set(int64(done), int64(o.histories)) }
	report, err := r.Run(ctx)
	bar.end()
	if err != nil {
		return err
	}
	report.Data = o.digest
	if o.asJSON {
		err = writeJSON(stdout, report)
	} else {
		err = printRehearsal(stdout, o.in, report)
	}
	if o.figure != "" && err == nil {
		err = drawRehearsal(o.figure, report)
	}
	if o.faults > 0 && err == nil {
		err = errReported
	}
	return err
}

// check reads the options and the set-ups.
func (o *rehearseOptions) check(paths []string) error {
	if err := checkFigure(o.figure); err != nil {
		return err
	}
	switch {
	case o.histories < 1 || o.histories > 1_000_000:
		return &usageError{errors.New("--histories is from 1 to 1,000,000")}
	case o.redraws < 100 || o.redraws > 1_000_000:
		return &usageError{errors.New("--resamples is from 100 to 1,000,000")}
	case len(paths) > 0 && o.givenForInvented:
		return &usageError{errors.New("--exposure, --years, --rate, --draw-rate, --peers and --begin say how histories are invented: leave them out where files are given")}
	case len(paths) == 0 && o.known != "":
		return &usageError{errors.New("--known names the episodes of a given history: name its files too")}
	case slices.ContainsFunc(o.frequencies, func(f float64) bool { return !(f > 0) || math.IsInf(f, 0) }):
		return &usageError{errors.New("--excesses-a-year are greater than 0")}
	}
	for _, path := range []string{o.config, o.against} {
		if path == "" && len(o.setups) == 1 {
			break
		}
		setup, err := loadSetup(path)
		if err != nil {
			return err
		}
		o.setups = append(o.setups, setup)
	}
	var err error
	if o.in, err = chooseIndicator(o.setups[0], o.indicator); err != nil {
		return err
	}
	return o.makePlan()
}

func (o *rehearseOptions) makePlan() error {
	shape, err := plant.ParseShape(o.shape)
	if err != nil {
		return &usageError{fmt.Errorf("--shape: %w", err)}
	}
	length := 0
	for i := range o.in.Windows {
		length = max(length, o.in.Windows[i].Slots)
	}
	if length == 0 && o.length == "" {
		return &usageError{errors.New("--length is missing: windows of the last trials have no length in time, so say how long an excess lasts")}
	}
	if o.length != "" {
		if length, err = plant.Slots(o.length, o.in.Every); err != nil {
			return &usageError{fmt.Errorf("--length: %w", err)}
		}
	}
	o.plan = &plant.Plan{
		Setups: o.setups, Indicator: o.in.Name, Ratios: o.ratios, Length: length, Shape: shape, Histories: o.histories,
		Seed: o.seed, Level: 1 - o.in.Alpha, Draws: o.redraws, Frequencies: o.frequencies,
	}
	return nil
}

// prepare makes the histories ready.
func (o *rehearseOptions) prepare(ctx context.Context, paths []string, stdin io.Reader, stderr io.Writer) (*plant.Rehearsal, error) {
	if len(paths) > 0 {
		return o.observe(ctx, paths, stdin, stderr)
	}
	if o.peers < 1 && slices.ContainsFunc(o.in.Baselines, func(b config.Baseline) bool { return b.Kind == config.Peers }) {
		return nil, &usageError{errors.New("--peers is missing: say how many other series there are, for a baseline from peers")}
	}
	how := plant.Invention{Series: o.files.series, Years: o.years, Rate: o.rate / o.in.Per, Drawn: o.drawn, Peers: o.peers}
	if o.in.Measure == config.Proportion {
		how.Rate = o.rate
	}
	var err error
	if o.exposure != "" {
		if how.Exposure, err = config.ParseDecimal(o.exposure); err != nil {
			return nil, &usageError{fmt.Errorf("--exposure %q: %w", o.exposure, err)}
		}
	}
	if how.Begin, err = moment(o.begin, o.in.Zone); err != nil {
		return nil, &usageError{fmt.Errorf("--begin: %w", err)}
	}
	return o.plan.Invent(how)
}

func (o *rehearseOptions) observe(ctx context.Context, paths []string, stdin io.Reader, stderr io.Writer) (*plant.Rehearsal, error) {
	episodes, err := readEpisodes(o.known, o.in)
	if err != nil {
		return nil, err
	}
	h, err := o.files.read(ctx, o.setups[0], paths, stdin, stderr)
	if err != nil {
		return nil, err
	}
	o.faults, o.digest = h.Counts.Faults, digestOf(h)
	return o.plan.Observe(messagesOf(h, o.files.until), episodes)
}

// readEpisodes reads a file of known episodes; nil without one.
func readEpisodes(path string, in *config.Indicator) (_ []plant.Episode, err error) {
	if path == "" {
		return nil, nil
	}
	f, err := os.Open(path)
	if err != nil {
		return nil, err
	}
	defer func() { err = errors.Join(err, f.Close()) }()
	episodes, err := plant.ReadKnown(f, in.Zone)
	if err != nil {
		return nil, fmt.Errorf("--known %s: %w", path, err)
	}
	// Those of series that the indicator doesn't monitor are no matter of its.
	kept := []plant.Episode{}
	for _, e := range episodes {
		if in.Matches(e.Series.String()) || !isName(e.Series.String()) {
			kept = append(kept, e)
		}
	}
	return kept, nil
}

func isName(pattern string) bool { return config.CheckSeries(pattern) == nil }

// messagesOf are the messages of a history, each its own, and a last one that
// moves the clock to the time until which it is complete.
func messagesOf(h *history.History, until monitor.Instant) []monitor.Message {
	var list []monitor.Message
	for m := range h.Messages(1) {
		m.Items = slices.Clone(m.Items)
		list = append(list, m)
	}
	if until != monitor.Beginning {
		list = append(list, monitor.Message{Kind: monitor.Tick, Stored: until, Time: until, HasTime: true})
	}
	return list
}

// digestOf is the lower-case hex SHA-256 of a history: of the canonical form of
// each row and the time at which it became known, in order, one a line.
func digestOf(h *history.History) string {
	sum := sha256.New()
	var line []byte
	for i := range h.Entries {
		e := &h.Entries[i]
		line = append(strconv.AppendInt(line[:0], int64(e.Time), 10), ' ')
		line = append(append(line, e.JSON...), '\n')
		sum.Write(line)
	}
	return hex.EncodeToString(sum.Sum(nil))
}
