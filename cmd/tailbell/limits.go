package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"math"

	"github.com/spf13/cobra"

	"tailbell/config"
	"tailbell/monitor/planning"
)

// limitsOptions are the options of "tailbell limits".
type limitsOptions struct {
	config, indicator string
	files             historyFlags
	exposure, vary    float64
	trials, of        int64
	allowance         string
	pLimit, assurance float64
	described         describedSeries
	ratios            []float64
	draws             int
	seed              uint64
	asJSON            bool
	figure            string
	set               func(name string) bool
}

// newLimitsCommand returns "tailbell limits": what an allowance, or a limit on p,
// buys.
func newLimitsCommand() *cobra.Command {
	var o limitsOptions
	c := &cobra.Command{
		Use:   "limits [HISTORY...]",
		Short: "Say what an allowance of false alerts buys: critical counts, what is found, how late",
		Long: `Says, before anything has happened, what looks will cost and find: for each
window the expected and the critical count, the attained size, the false alerts
a year, the ratio to the usual rate that a look finds with a chance of 50, 80 and
95 %, how long changes by --ratios go unnoticed, and what the next critical count
would change. What is exact and what is not stands beside each figure.

For a set-up. Each indicator (or --indicator) is planned for with its windows,
baselines and its allowance or limit on p. The exposure of a slot is taken from
files of history, or without any from the store; or say it: --exposure, or
--trials for a proportion. --allowance and --p-limit ask what another limit would
do, and change nothing.

For a description alone. Give a baseline as to tailbell exact (--baseline, or
--reference-events with --reference-exposure or --reference-trials; --per), the
--exposure or --trials of a slot, --every, each --window (with its step after a
colon), and --allowance or --p-limit.

Delays are simulated from --seed: from the beginning of a slot from which on
everything happens at so many times the usual rate, to the end of the slot whose
look signals first; settle comes on top. Figures of false alerts count them at
most: an alert opens once in a run of signals.`,
		Example: `  tailbell limits --config quillmere.toml --indicator line-infection history.csv
  tailbell limits --baseline 1.8 --per 1000 --exposure 22 --window 28d --window 84d:7d --allowance "1 in 5y"
  tailbell limits --reference-events 36 --reference-exposure 20000 --exposure 22 --window 28d --allowance "1 in 5y" --assurance 0.9`,
		RunE: func(c *cobra.Command, args []string) error {
			o.set = func(name string) bool { return c.Flags().Changed(name) }
			return limits(c.Context(), &o, args, c.InOrStdin(), c.OutOrStdout(), c.ErrOrStderr())
		},
	}
	o.add(c)
	return c
}

func (o *limitsOptions) add(c *cobra.Command) {
	addConfigFlag(c, &o.config)
	o.files.add(c)
	f := c.Flags()
	f.Lookup("series").Usage = "only series that match the `PATTERN`; also the series of CSV files without a series column"
	f.StringVar(&o.indicator, "indicator", "", "only the indicator of this `NAME`")
	f.Float64Var(&o.exposure, "exposure", 0, "the `AMOUNT` of exposure of a slot")
	f.Int64Var(&o.trials, "trials", 0, "the `NUMBER` of trials in a slot")
	f.Float64Var(&o.vary, "vary", 0, "by which `SHARE` the exposure of a slot may differ from that, e.g. 0.2")
	f.Int64Var(&o.of, "of", 1, "the `NUMBER` of series that are like it, for the false alerts of all, and for a set-up's allowance over all series")
	f.StringVar(&o.allowance, "allowance", "", "the false alerts accepted on each series, so `MANY` in a time: \"1 in 5y\"")
	f.Float64Var(&o.pLimit, "p-limit", 0, "the p-value `P` at or under which a look signals, e.g. 0.001")
	f.Float64Var(&o.assurance, "assurance", 0, "keep the allowance at the bound of an estimated baseline with this `CONFIDENCE`, e.g. 0.9, rather than on average")
	o.described.add(f)
	f.Float64SliceVar(&o.ratios, "ratios", []float64{1.5, 2, 3, 5}, "the `RATIOS` to the usual rate for which delays are simulated")
	f.IntVar(&o.draws, "draws", 2000, "the `NUMBER` of simulated courses for each ratio")
	f.Uint64Var(&o.seed, "seed", 1, "the seed, a `NUMBER`, of all that is simulated")
	f.BoolVar(&o.asJSON, "json", false, "print JSON")
	f.StringVar(&o.figure, "figure", "", "also draw the chance to signal against the ratio to this `FILE`, .svg or .png")
	c.MarkFlagsMutuallyExclusive("allowance", "p-limit")
	c.MarkFlagsMutuallyExclusive("exposure", "trials")
	c.MarkFlagsMutuallyExclusive("baseline", "reference-events")
	c.MarkFlagsMutuallyExclusive("reference-exposure", "reference-trials")
}

// check says what makes no sense for either form.
func (o *limitsOptions) check() error {
	switch {
	case o.draws < 100 || o.draws > 1_000_000:
		return errors.New("--draws is from 100 to 1,000,000")
	case len(o.ratios) > 20:
		return errors.New("--ratios takes 20 at most")
	case !(o.vary >= 0 && o.vary <= 100):
		return fmt.Errorf("--vary is %v: give a number from 0 to 100, e.g. 0.2", o.vary)
	case o.of < 1:
		return errors.New("--of counts series: 1 or more")
	case o.set("p-limit") && !(o.pLimit > 0 && o.pLimit < 0.5):
		return fmt.Errorf("--p-limit is %v: give a number above 0 and under 0.5, e.g. 0.001", o.pLimit)
	case o.set("assurance") && !(o.assurance >= 0.5 && o.assurance < 1):
		return fmt.Errorf("--assurance is %v: give a number from 0.5 to under 1, e.g. 0.9", o.assurance)
	}
	for _, r := range o.ratios {
		if !(r > 1) || math.IsInf(r, 0) {
			return fmt.Errorf("--ratios has %v: give ratios above 1 (the lower tail is asked about one over them)", r)
		}
	}
	return checkFigure(o.figure)
}

func limits(ctx context.Context, o *limitsOptions, paths []string, stdin io.Reader, stdout, stderr io.Writer) error {
	if err := o.check(); err != nil {
		var usage *usageError
		if errors.As(err, &usage) {
			return err
		}
		return &usageError{err}
	}
	var groups []*limitsGroup
	var faults bool
	var err error
	if o.set("baseline") || o.set("reference-events") {
		if len(paths) > 0 || o.set("config") {
			return &usageError{errors.New("a baseline among the options describes a series by itself: leave out --config and files, or the baseline")}
		}
		groups, err = o.describe()
	} else {
		groups, faults, err = o.ask(ctx, paths, stdin, stderr)
	}
	if err != nil {
		return err
	}
	for _, g := range groups {
		if err := g.answer(ctx, o, stderr); err != nil {
			return err
		}
	}
	if err := o.tell(stdout, groups); err != nil {
		return err
	}
	if o.figure != "" {
		if err := drawLimits(o.figure, groups[0]); err != nil {
			return err
		}
	}
	if faults {
		return errReported
	}
	return nil
}

// limitsGroup is an indicator with the series that it is planned for.
type limitsGroup struct {
	in        *config.Indicator
	questions []*planning.Question
	// alike is how many series each question stands for; byBaseline is set where
	// there is a question for each baseline, and how many series have it is not
	// known.
	alike      int64
	byBaseline bool
	// chosen is the question that is answered in full; the others without delays.
	chosen  int
	reports []*planning.Report
	// withheld are series whose baselines hold too few events.
	withheld []string
	// from says where the exposure comes from.
	from string
}

// answer plans for each series; delays are simulated for the chosen one.
func (g *limitsGroup) answer(ctx context.Context, o *limitsOptions, stderr io.Writer) error {
	bar := newBar(stderr, 1, "simulating "+g.in.Name)
	defer bar.end()
	for i, q := range g.questions {
		options := planning.Options{Seed: o.seed, Draws: o.draws}
		if i == g.chosen {
			options.Ratios = o.ratios
			options.Progress = func(done, total int) { bar.set(int64(done), int64(total)) }
		}
		r, err := planning.Answer(ctx, q, options)
		if err != nil {
			return fmt.Errorf("%s: %w", g.in.Name, err)
		}
		g.reports = append(g.reports, r)
	}
	return nil
}

// full is the report that holds everything.
func (g *limitsGroup) full() *planning.Report { return g.reports[g.chosen] }

// series is how many series the answers are about, 0 if that is not known.
func (g *limitsGroup) series() int64 {
	if g.byBaseline {
		return 0
	}
	return g.alike * int64(len(g.reports))
}

// inAll sums the false alerts a year of all series.
func (g *limitsGroup) inAll() (perYear, low, high float64) {
	for _, r := range g.reports {
		n := float64(g.alike)
		perYear, low, high = perYear+n*r.PerYear, low+n*r.Low, high+n*r.High
	}
	return perYear, low, high
}
