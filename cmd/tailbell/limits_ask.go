package main

import (
	"context"
	"errors"
	"fmt"
	"io"
	"math"
	"slices"
	"strconv"
	"time"

	"tailbell/config"
	"tailbell/monitor/allowance"
	"tailbell/monitor/estimate"
	"tailbell/monitor/planning"
	"tailbell/monitor/store"
)

// seen is what a history counted: events in an exposure weighted by strata.
type seen struct {
	events   int64
	exposure float64
}

// seriesQuestion asks about one series of an indicator under a baseline.
func seriesQuestion(in *config.Indicator, series string, b *config.Baseline, s seen, exposure, vary float64) (*planning.Question, error) {
	p, err := allowance.For(in, b, s.events, s.exposure, exposure, vary)
	if err != nil {
		return nil, err
	}
	q := &planning.Question{Series: series, Plan: p, Every: in.Every, Settle: in.Settle, PLimit: in.PLimit}
	for _, w := range in.Windows {
		q.Names = append(q.Names, w.Name)
	}
	checked := p
	if in.PLimit > 0 {
		checked.PerYear = 1
	}
	return q, checked.Check()
}

// ask makes the questions of a set-up.
func (o *limitsOptions) ask(ctx context.Context, paths []string, stdin io.Reader, stderr io.Writer) (groups []*limitsGroup, faults bool, err error) {
	for _, name := range []string{"every", "window", "tails", "looks", "per", "margin", "spread"} {
		if o.set(name) {
			return nil, false, &usageError{fmt.Errorf("--%s describes a series by itself, with a baseline among the options; a set-up says it already", name)}
		}
	}
	setup, err := loadSetup(o.config)
	if err != nil {
		return nil, false, err
	}
	chosen := setup.Indicators
	if o.indicator != "" {
		in, err := chooseIndicator(setup, o.indicator)
		if err != nil {
			return nil, false, err
		}
		chosen = []config.Indicator{*in}
	}
	if len(chosen) > 1 && slices.Contains(paths, "-") {
		return nil, false, &usageError{errors.New("standard input can be read once only: say --indicator, or give a file")}
	}
	for i := range chosen {
		in := chosen[i]
		if err := o.override(&in); err != nil {
			return nil, false, &usageError{err}
		}
		g := &limitsGroup{in: &in, alike: 1}
		data := baselineData{in: &in, reports: newReports(&in)}
		if err := o.fill(ctx, g, &data, setup, paths, stdin, stderr); err != nil {
			return nil, false, fmt.Errorf("%s: %w", in.Name, err)
		}
		faults = faults || data.faults > 0
		groups = append(groups, g)
		stderr = io.Discard // the same rows are no news
	}
	return groups, faults, nil
}

// fill asks about each series of the indicator's history, or about each of its
// baselines where the exposure is said.
func (o *limitsOptions) fill(ctx context.Context, g *limitsGroup, d *baselineData, setup *config.Setup, paths []string, stdin io.Reader, stderr io.Writer) error {
	if exposure, from, ok := o.said(g.in); ok && len(paths) == 0 {
		g.from = from
		return o.fillSaid(g, exposure)
	}
	if o.set("of") {
		return &usageError{errors.New("--of goes with --exposure or --trials: how many series there are is counted")}
	}
	var err error
	switch {
	case len(paths) > 0:
		err = d.fromFiles(ctx, &baselineOptions{files: o.files}, setup, paths, stdin, stderr)
	default:
		if err = d.fromStores(setup); errors.Is(err, store.ErrInUse) {
			err = d.fromDaemon(ctx, o.config, setup)
		}
		if err != nil {
			err = fmt.Errorf("how much exposure has a slot? Say --exposure (--trials for a proportion), or give files of history; its store says nothing: %w", err)
		}
	}
	if err != nil {
		return err
	}
	h, err := estimate.Gather(g.in, d.sums, estimate.Span{Clock: d.clock})
	if err == nil && o.files.series != "" {
		h, err = h.Select(config.NewPattern(o.files.series).Match)
	}
	if err != nil {
		return fmt.Errorf("%w%s", err, d.seriesSeen())
	}
	g.from = fmt.Sprintf("as counted to before %s", h.To.Time().In(g.in.Zone).Format(time.DateOnly))
	return o.fillCounted(g, h)
}

// said is the exposure of a slot that options or the clock say.
func (o *limitsOptions) said(in *config.Indicator) (exposure float64, from string, ok bool) {
	switch {
	case in.Measure == config.Proportion && o.set("trials"):
		return float64(o.trials), "as given", true
	case in.Measure == config.Rate && o.set("exposure"):
		return o.exposure, "as given", true
	case in.Exposure == config.Clock:
		size, err := strconv.ParseFloat(in.Clock.Size.String(), 64)
		year := 365.2425 * 24 * float64(time.Hour)
		return size * year / in.Every.PerYear() / float64(in.Clock.Per), "by the clock", err == nil
	}
	return 0, "", false
}

// fillSaid asks about each baseline.
func (o *limitsOptions) fillSaid(g *limitsGroup, exposure float64) error {
	g.byBaseline, g.alike = len(g.in.Baselines) > 1, o.of
	if a := g.in.Allowance; a != nil && a.PerIndicator && !o.set("of") {
		return errors.New("how many series share the allowance? Say --of, or give files of history")
	}
	for i := range g.in.Baselines {
		b := &g.in.Baselines[i]
		if b.Kind == config.Trailing || b.Kind == config.Peers {
			return fmt.Errorf("a %s baseline is counted from history: give files of it", b.Kind)
		}
		q, err := seriesQuestion(g.in, b.Series.String(), b, seen{}, exposure, o.vary)
		if err != nil {
			return err
		}
		g.questions = append(g.questions, q)
	}
	g.share(int(o.of))
	return nil
}

// share splits an allowance for the whole indicator over its series.
func (g *limitsGroup) share(n int) {
	a := g.in.Allowance
	if a == nil || !a.PerIndicator {
		return
	}
	for _, q := range g.questions {
		q.Plan.PerYear = allowance.Share(a.PerYear(), a.Reserve, n)
	}
}

// fillCounted asks about each series of a history.
func (o *limitsOptions) fillCounted(g *limitsGroup, h *estimate.History) error {
	last := h.To.Time()
	for i := range h.Series {
		s := &h.Series[i]
		b := g.in.BaselineAt(s.Name, last)
		if b == nil {
			if b = g.in.BaselineFor(s.Name); b == nil {
				continue
			}
		}
		exposure, vary := usualExposure(g.in, s)
		switch {
		case o.set("vary"):
			vary = o.vary
		case g.in.PLimit > 0:
			vary = 0 // nothing has to be kept: what is usual is told
		}
		counted := countedBy(g.in, b, h, s)
		if (b.Kind == config.Trailing || b.Kind == config.Peers) && (counted.events < b.MinEvents || counted.exposure == 0) {
			g.withheld = append(g.withheld, s.Name)
			continue
		}
		q, err := seriesQuestion(g.in, s.Name, b, counted, exposure, vary)
		if err != nil {
			return fmt.Errorf("%s: %w", s.Name, err)
		}
		q.Plan.Volume = busiest(g.in, s)
		g.questions = append(g.questions, q)
	}
	if len(g.questions) == 0 {
		return errors.New("no series has a baseline with events enough: no look would be made")
	}
	g.share(len(g.questions))
	order := make([]int, len(g.questions))
	for i := range order {
		order[i] = i
	}
	slices.SortStableFunc(order, func(a, b int) int {
		return compareFloats(g.questions[a].Plan.Exposure, g.questions[b].Plan.Exposure)
	})
	g.chosen = order[len(order)/2]
	return nil
}

func compareFloats(a, b float64) int {
	switch {
	case a < b:
		return -1
	case a > b:
		return 1
	}
	return 0
}

// usualExposure is the mean exposure of the slots of the latest year (or longest
// window), and by how much they differ from it at most: upwards any slot, and
// downwards the mean of any window, for less in single slots of it changes
// nothing.
func usualExposure(in *config.Indicator, s *estimate.Series) (exposure, vary float64) {
	n := int(math.Ceil(in.Every.PerYear()))
	for _, w := range in.Windows {
		n = max(n, w.Slots)
	}
	slots := s.Slots[max(0, len(s.Slots)-n):]
	upTo := make([]float64, len(slots)+1)
	most := 0.0
	for i := range slots {
		upTo[i+1] = upTo[i] + slots[i].Exposure
		most = max(most, slots[i].Exposure)
	}
	exposure = upTo[len(slots)] / float64(len(slots))
	if in.Measure == config.Proportion {
		exposure = math.Ceil(exposure)
	}
	if !slices.ContainsFunc(in.Windows, func(w config.Window) bool { return !isTrials(w) }) {
		return exposure, 0 // windows of trials are planned for by their volume
	}
	vary = most/exposure - 1
	for _, w := range in.Windows {
		if isTrials(w) {
			continue
		}
		length := min(w.Slots, len(slots))
		for i := length; i <= len(slots); i++ {
			vary = max(vary, 1-(upTo[i]-upTo[i-length])/float64(length)/exposure)
		}
	}
	if vary < 1e-9 {
		vary = 0 // sums round
	}
	return exposure, vary
}

// countedBy is what a trailing or peers baseline counts at the end of a history.
func countedBy(in *config.Indicator, b *config.Baseline, h *estimate.History, s *estimate.Series) (c seen) {
	if b.Kind != config.Trailing && b.Kind != config.Peers || len(s.Slots) == 0 {
		return c
	}
	end := s.Slots[len(s.Slots)-1].Number + 1
	if b.Kind == config.Trailing {
		end -= int64(b.GapSlots)
	}
	from := end - int64(b.SpanSlots)
	for i := range h.Series {
		other := &h.Series[i]
		if (other.Name == s.Name) != (b.Kind == config.Trailing) {
			continue
		}
		for j := range other.Slots {
			if t := &other.Slots[j]; t.Number >= from && t.Number < end {
				c.events += t.Events
				c.exposure += t.Exposure * b.Strata.At(t.Start.Time().In(in.Zone))
			}
		}
	}
	return c
}
