package main

import (
	"errors"
	"fmt"
	"strconv"
	"strings"
	"time"

	"github.com/spf13/pflag"

	"tailbell/config"
)

// describedSeries is a series that options alone describe.
type describedSeries struct {
	baseline, per, margin, spread float64
	refEvents, refTrials          int64
	refExposure                   float64
	every                         string
	windows, tails, looks         []string
}

func (d *describedSeries) add(f *pflag.FlagSet) {
	f.Float64Var(&d.baseline, "baseline", 0, "the known baseline, a `RATE` per --per units")
	f.Float64Var(&d.per, "per", 1, "the `NUMBER` of units of exposure (or trials) that rates are given for")
	f.Int64Var(&d.refEvents, "reference-events", 0, "the `NUMBER` of events of the reference")
	f.Float64Var(&d.refExposure, "reference-exposure", 0, "the `AMOUNT` of exposure of the reference")
	f.Int64Var(&d.refTrials, "reference-trials", 0, "the `NUMBER` of trials of the reference")
	f.Float64Var(&d.margin, "margin", 1, "the `RATIO` to the baseline that is still no news")
	f.Float64Var(&d.spread, "spread", 1, "the `RATIO` of the variance of a slot's count to that of the model")
	f.StringVar(&d.every, "every", "1d", "the `LENGTH` of a slot")
	f.StringArrayVar(&d.windows, "window", nil, "a window: its `SPAN`, or span:step such as 84d:7d; of a proportion also \"200 trials\"; once for each")
	f.StringSliceVar(&d.tails, "tails", []string{"upper"}, "the `TAILS`: upper, lower, or both")
	f.StringSliceVar(&d.looks, "looks", []string{"slot"}, "the `LOOKS`: slot, arrival, or both")
}

// describe makes an indicator of the options.
func (o *limitsOptions) describe() ([]*limitsGroup, error) {
	in, err := o.indicatorOf()
	if err != nil {
		return nil, &usageError{err}
	}
	exposure := o.exposure
	if in.Measure == config.Proportion {
		exposure = float64(o.trials)
	}
	g := &limitsGroup{in: in, alike: o.of, from: "as given"}
	q, err := seriesQuestion(in, "", &in.Baselines[0], seen{}, exposure, o.vary)
	if err != nil {
		return nil, &usageError{err}
	}
	g.questions = append(g.questions, q)
	return []*limitsGroup{g}, nil
}

func (o *limitsOptions) indicatorOf() (*config.Indicator, error) {
	d := &o.described
	in := &config.Indicator{
		Name: "described", Title: "A series as described", EventNoun: "events", Unit: "units of exposure", Per: d.per, Zone: time.UTC,
		Quiet: 7, Alpha: 0.05,
	}
	if o.set("trials") {
		in.Measure, in.Unit = config.Proportion, "trials"
	}
	b, err := o.baseline(in)
	if err != nil {
		return nil, err
	}
	in.Baselines = []config.Baseline{b}
	if in.Every, err = config.ParseSpan(d.every); err != nil {
		return nil, fmt.Errorf("--every %q is %w", d.every, err)
	}
	if err := d.readLooks(in); err != nil {
		return nil, err
	}
	for _, text := range d.windows {
		w, err := windowOf(text, in.Every)
		if err != nil {
			return nil, err
		}
		in.Windows = append(in.Windows, w)
	}
	switch {
	case len(d.windows) == 0:
		return nil, errors.New("which windows? Say e.g. --window 28d")
	case !o.set("exposure") && !o.set("trials"):
		return nil, errors.New("how much exposure has a slot? Say --exposure, or --trials for a proportion")
	case !o.set("allowance") && !o.set("p-limit"):
		return nil, errors.New(`how many false alerts are accepted? Say e.g. --allowance "1 in 5y", or --p-limit 0.001`)
	}
	if err := checkTrials(in); err != nil {
		return nil, err
	}
	return in, o.override(in)
}

func (d *describedSeries) readLooks(in *config.Indicator) error {
	for _, tail := range d.tails {
		switch tail {
		case "upper":
			in.Upper = true
		case "lower":
			in.Lower = true
		default:
			return fmt.Errorf("--tails has %q: give upper, lower or both", tail)
		}
	}
	for _, look := range d.looks {
		switch look {
		case "slot":
			in.SlotLooks = true
		case "arrival":
			in.ArrivalLooks = true
		default:
			return fmt.Errorf("--looks has %q: give slot, arrival or both", look)
		}
	}
	switch {
	case in.ArrivalLooks && !in.Upper:
		return errors.New("arrival looks watch for more events than usual, and --tails asks for fewer only")
	case in.Lower && !in.SlotLooks:
		return errors.New("the lower tail is never looked at: add slot to --looks")
	}
	return nil
}

// baseline reads the usual rate.
func (o *limitsOptions) baseline(in *config.Indicator) (config.Baseline, error) {
	d := &o.described
	b := config.Baseline{Margin: d.margin, Spread: d.spread}
	size := d.refExposure
	if o.set("reference-trials") {
		size = float64(d.refTrials)
	}
	proportion := in.Measure == config.Proportion
	switch {
	case !(d.per > 0):
		return b, fmt.Errorf("--per is %v: give a number above 0, e.g. 1000", d.per)
	case o.set("baseline"):
		b.Kind, b.Rate = config.Known, d.baseline/d.per
		return b, nil
	case proportion && !o.set("reference-trials"), !proportion && !o.set("reference-exposure"):
		return b, errors.New("--reference-events goes with --reference-exposure and --exposure, or with --reference-trials and --trials")
	}
	b.Kind, b.Events = config.Reference, d.refEvents
	exposure, err := config.ParseDecimal(strconv.FormatFloat(size, 'f', -1, 64))
	if err != nil {
		return b, fmt.Errorf("the exposure of the reference, %v, is %w", size, err)
	}
	b.Exposure = exposure
	return b, nil
}

// windowOf reads a window such as "28d" or "84d:7d".
func windowOf(text string, every config.Every) (config.Window, error) {
	if strings.HasSuffix(text, "trials") {
		return trialsOf(text)
	}
	span, step, stepped := strings.Cut(text, ":")
	w := config.Window{Name: span, Step: 1}
	var err error
	if w.Slots, err = slotsIn(span, every); err != nil {
		return w, fmt.Errorf("--window %q: %w", text, err)
	}
	if stepped {
		if w.Step, err = slotsIn(step, every); err != nil {
			return w, fmt.Errorf("--window %q: %w", text, err)
		}
	}
	if w.Step > w.Slots {
		return w, fmt.Errorf("--window %q: the step is longer than the window, so that some events would never be looked at", text)
	}
	return w, nil
}

func slotsIn(text string, every config.Every) (int, error) {
	span, err := config.ParseSpan(text)
	if err != nil {
		return 0, fmt.Errorf("%q is %w", text, err)
	}
	return config.SlotsIn(span, every)
}

// override takes allowance and limit from the options.
func (o *limitsOptions) override(in *config.Indicator) error {
	if o.set("allowance") {
		a, err := config.ParseAllowance(o.allowance)
		if err != nil {
			return fmt.Errorf("--allowance %q is %w", o.allowance, err)
		}
		in.Allowance, in.PLimit = &a, 0
	}
	if o.set("p-limit") {
		in.Allowance, in.PLimit = nil, o.pLimit
	}
	if !o.set("assurance") {
		return nil
	}
	if in.Allowance == nil {
		return errors.New("--assurance means nothing without an allowance")
	}
	a := *in.Allowance
	a.Assurance = o.assurance
	in.Allowance = &a
	return nil
}
