package main

import (
	"errors"
	"fmt"
	"math"
	"math/big"

	"github.com/spf13/cobra"

	"tailbell/exact"
)

// exactFlags are the options of tailbell exact as they were typed.
type exactFlags struct {
	question
	options  exactOptions
	exposure float64
	trials   int64
	refSize  float64
	refTrial int64
	tail     string
	level    string
	sides    string
	json     bool
	figure   string
}

func newExactCommand() *cobra.Command {
	var f exactFlags
	c := &cobra.Command{
		Use:   "exact [FILE.csv | -]",
		Short: "Test one number, or a table of units, against a baseline",
		Long: `Tests a count against a baseline, exactly: no normal approximation anywhere.

One number. Give --events with --exposure (a rate: Poisson) or --trials (a
proportion: binomial), and a baseline: a known one (--baseline, per --per units
of exposure), or a reference count with its own exposure or trials
(--reference-events with --reference-exposure: the conditional test of two
rates; with --reference-trials: Fisher's test, its margin on the odds ratio).
Without a baseline only the rate and its bounds are given.

  tailbell exact --events 4 --exposure 616 --baseline 1.8 --per 1000

A table. FILE.csv ("-" is standard input) has a header and a row for each unit.
Columns: events; exposure or trials; and, where they differ from row to row,
baseline, reference_events, reference_exposure or reference_trials, margin (else
the options of the same names hold for all rows). Other columns are passed on.
Every row comes back with p, log10 p, rate, bounds, ratio, bounds, critical
count and attained size, and with p adjusted over the rows: by Holm's procedure
(holm_p; hochberg_p is Hochberg's, for independent rows) so that hardly ever any
row signals by chance, by Benjamini and Hochberg's (bh_p; by_p is Benjamini and
Yekutieli's, whatever the rows have to do with each other) so that few of those
that do signal do so by chance. A row that can't be read is named with its line,
the others are answered, and the exit code is 1.

Whoever looks only at the rows with a small p looks at bounds that miss more often
than they say. Rows whose bh_p is at most --alpha are therefore given bounds for
what was selected too (fcr_rate_lower and so on, at fcr_alpha: alpha times the
share of the rows selected): of those, no more than alpha miss on average if the
rows are independent (false coverage rate; Benjamini and Yekutieli 2005).

A signal is a statistical finding: it diagnoses nothing, and silence proves no
safety. Local policy decides.`,
		Args: cobra.MaximumNArgs(1),
		RunE: func(c *cobra.Command, args []string) error {
			if err := f.settle(c); err != nil {
				return &usageError{err}
			}
			if len(args) == 1 {
				return f.answerTable(c, args[0])
			}
			return f.answerOne(c)
		},
	}
	f.add(c)
	return c
}

func (f *exactFlags) add(c *cobra.Command) {
	fl := c.Flags()
	fl.Int64Var(&f.events, "events", 0, "the `NUMBER` of events that there were")
	fl.Float64Var(&f.exposure, "exposure", 0, "the `AMOUNT` of exposure they happened in: a rate is tested")
	fl.Int64Var(&f.trials, "trials", 0, "the `NUMBER` of trials they happened in: a proportion is tested")
	fl.Float64Var(&f.baseline, "baseline", 0, "the known baseline, a `RATE` per --per units")
	fl.Float64Var(&f.options.per, "per", 1, "the `NUMBER` of units of exposure (or trials) that rates are given for")
	fl.Int64Var(&f.refEvents, "reference-events", 0, "the `NUMBER` of events of the reference")
	fl.Float64Var(&f.refSize, "reference-exposure", 0, "the `AMOUNT` of exposure of the reference")
	fl.Int64Var(&f.refTrial, "reference-trials", 0, "the `NUMBER` of trials of the reference")
	fl.Float64Var(&f.margin, "margin", 1, "the `RATIO` to the baseline that is still no news (for two proportions: odds ratio); with --tail lower, one over it")
	fl.StringVar(&f.tail, "tail", "upper", "the `TAIL`: upper, too many; lower, too few")
	fl.Float64Var(&f.options.alpha, "alpha", 0.05, "the `CHANCE` that the bounds may miss, both sides together")
	fl.StringVar(&f.level, "level", "", "the `LEVEL` of the bounds, e.g. 0.95: one minus --alpha")
	fl.Float64Var(&f.options.limit, "limit", 0.001, "the p-value `P` at or under which a look signals, for the critical count")
	fl.StringVar(&f.sides, "two-sided", "", "a two-sided p and bounds, of this `KIND`: central, minlike or blaker")
	fl.BoolVar(&f.options.mid, "mid-p", false, "mid-p tails and bounds: near their level on average, not guaranteed")
	fl.StringVar(&f.figure, "figure", "", "draw the units of a table against one rate for all into this `FILE`: .svg or .png")
	fl.BoolVar(&f.json, "json", false, "print JSON, for a table an object a line")
	c.MarkFlagsMutuallyExclusive("alpha", "level")
	c.MarkFlagsMutuallyExclusive("tail", "two-sided")
	c.MarkFlagsMutuallyExclusive("exposure", "trials")
	c.MarkFlagsMutuallyExclusive("baseline", "reference-events")
	c.MarkFlagsMutuallyExclusive("reference-exposure", "reference-trials")
}

// settle checks what was typed and turns it into a question and options.
func (f *exactFlags) settle(c *cobra.Command) error {
	set := func(name string) bool { return c.Flags().Changed(name) }
	f.hasEvents, f.hasBaseline, f.hasReference = set("events"), set("baseline"), set("reference-events")
	switch {
	case set("exposure"):
		f.size, f.hasSize = f.exposure, true
	case set("trials"):
		f.size, f.hasSize, f.proportion = float64(f.trials), true, true
	}
	switch {
	case set("reference-exposure"):
		f.reference, f.hasRefSize = f.refSize, true
	case set("reference-trials"):
		f.reference, f.hasRefSize, f.refProportion = float64(f.refTrial), true, true
	}
	if err := checkFigure(f.figure); err != nil {
		return err
	}
	if f.figure != "" && f.hasEvents {
		return errors.New("--figure draws the units of a table: give a FILE in the place of --events")
	}
	return f.options.settle(f.tail, f.sides, f.level)
}

// exactOptions are what holds for all rows of a table.
type exactOptions struct {
	per, alpha, limit float64
	lower             bool
	twoSided          bool
	sides             exact.Sides
	mid               bool
}

func (o *exactOptions) settle(tail, sides, level string) error {
	switch tail {
	case "upper":
	case "lower":
		o.lower = true
	default:
		return fmt.Errorf("--tail is %q: give upper or lower", tail)
	}
	if sides != "" {
		s, err := exact.ParseSides(sides)
		if err != nil {
			return fmt.Errorf("--two-sided is %q: give central, minlike or blaker", sides)
		}
		o.twoSided, o.sides = true, s
	}
	if o.mid && o.twoSided && o.sides != exact.Central {
		return errors.New("--mid-p goes with one-sided tests and with --two-sided central only")
	}
	if level != "" {
		a, err := missedBy(level)
		if err != nil {
			return err
		}
		o.alpha = a
	}
	switch {
	case !(o.alpha > 0 && o.alpha < 1):
		return fmt.Errorf("--alpha is %v: give a number between 0 and 1, e.g. 0.05", o.alpha)
	case !(o.limit > 0 && o.limit < 1):
		return fmt.Errorf("--limit is %v: give a number between 0 and 1, e.g. 0.001", o.limit)
	case !(o.per > 0) || math.IsInf(o.per, 0):
		return fmt.Errorf("--per is %v: give a number above 0, e.g. 1000", o.per)
	}
	return nil
}

// missedBy is one minus a level, taken from its decimals: 1-0.999999999 in float64 has lost
// eight of its digits.
func missedBy(level string) (float64, error) {
	r, ok := new(big.Rat).SetString(level)
	if len(level) > 100 || !ok {
		return 0, fmt.Errorf("--level is %q: give a number such as 0.95", level)
	}
	a, _ := r.Sub(big.NewRat(1, 1), r).Float64()
	if !(a > 0 && a < 1) {
		return 0, fmt.Errorf("--level is %q: give a number between 0 and 1, e.g. 0.95 for 95 %%", level)
	}
	return a, nil
}

func (f *exactFlags) answerOne(c *cobra.Command) error {
	a, err := f.options.answer(f.question)
	if err != nil {
		return &usageError{err}
	}
	if f.json {
		return writeJSONLine(c.OutOrStdout(), a.record(f.options))
	}
	return a.tell(c.OutOrStdout(), f.options)
}
