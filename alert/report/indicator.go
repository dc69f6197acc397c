package report

import (
	"cmp"
	"context"
	"errors"
	"fmt"
	"math"
	"slices"
	"strings"
	"time"

	"tailbell/alert/words"
	"tailbell/config"
	"tailbell/exact"
	"tailbell/monitor"
	"tailbell/monitor/estimate"
)

// one gathers what came of one indicator.
func (r *Recorder) one(ctx context.Context, cfg *config.Indicator, sums []monitor.SlotSum, clock monitor.Instant, o Options) (*Indicator, error) {
	how, err := describe(r.setup, cfg)
	if err != nil {
		return nil, err
	}
	in := &Indicator{Cfg: cfg, How: how, Looks: r.made[cfg.Name][0], Withheld: r.made[cfg.Name][1]}
	for i := range cfg.Baselines {
		in.Baselines = append(in.Baselines, baselineOf(cfg, &cfg.Baselines[i]))
	}
	h, err := estimate.Gather(cfg, sums, estimate.Span{Clock: clock})
	if errors.Is(err, estimate.ErrNothing) {
		return in, nil
	}
	if err != nil {
		return nil, err
	}
	if o.Draws > 0 {
		if in.Estimate, err = estimate.Analyse(ctx, h, estimate.Options{Seed: o.Seed, Draws: o.Draws}); err != nil {
			return nil, err
		}
	}
	r.alerts(in)
	r.series(in, h, o)
	return in, nil
}

// describe takes the sentences on the indicator from the description of the
// whole set-up.
func describe(setup *config.Setup, cfg *config.Indicator) ([]string, error) {
	alone := *setup
	alone.Indicators = []config.Indicator{*cfg}
	var b strings.Builder
	if err := alone.Describe(&b); err != nil {
		return nil, err
	}
	var how []string
	for _, line := range strings.Split(b.String(), "\n") {
		if strings.HasPrefix(line, "  ") {
			how = append(how, strings.TrimSpace(line))
		}
	}
	return how, nil
}

// baselineOf says what a baseline is, with exact bounds where it is a
// reference.
func baselineOf(in *config.Indicator, b *config.Baseline) Baseline {
	row := Baseline{Series: b.Series.String(), Source: b.Source, Rate: "counted from the history", Bounds: "-"}
	if b.Version != "" {
		row.Source = strings.TrimSpace(row.Source + " (version " + b.Version + ")")
	}
	switch b.Kind {
	case config.Known:
		row.Kind, row.Rate = "known", words.Number(b.Rate*in.Per)
	case config.Reference:
		exposure := float64(b.Exposure.Coef) / math.Pow10(int(b.Exposure.Digits))
		lower, upper := exact.Garwood(b.Events, in.Alpha)
		if in.Measure == config.Proportion {
			lower, upper = exact.ClopperPearson(b.Events, int64(exposure), in.Alpha)
			lower, upper = lower*exposure, upper*exposure
		}
		row.Kind = fmt.Sprintf("reference: %s in %s %s", words.Amount(b.Events, in.EventNoun), words.Grouped(b.Exposure.String()), in.Unit)
		row.Rate = words.Number(float64(b.Events) / exposure * in.Per)
		row.Bounds = words.Number(lower/exposure*in.Per) + " to " + words.Number(upper/exposure*in.Per)
	case config.Trailing:
		row.Kind = fmt.Sprintf("the series' own past, %d slots, %d before the window", b.SpanSlots, b.GapSlots)
	case config.Peers:
		row.Kind = fmt.Sprintf("its peers over %d slots", b.SpanSlots)
	}
	if b.Margin != 1 {
		row.Kind += fmt.Sprintf("; a ratio of %g is accepted", b.Margin)
	}
	if b.Spread > 1 {
		row.Kind += fmt.Sprintf("; spread %g", b.Spread)
	}
	var valid []string
	if !b.From.IsZero() {
		valid = append(valid, "from "+b.From.In(in.Zone).Format(time.DateOnly))
	}
	if !b.To.IsZero() {
		valid = append(valid, "to "+b.To.In(in.Zone).Format(time.DateOnly))
	}
	row.From = strings.Join(valid, " ")
	return row
}

// alerts takes the indicator's alerts, in order of their opening.
func (r *Recorder) alerts(in *Indicator) {
	for _, a := range r.records {
		if a.Indicator == in.Cfg.Name {
			in.Alerts = append(in.Alerts, Alert{Record: a})
		}
	}
	slices.SortFunc(in.Alerts, func(a, b Alert) int { return cmp.Or(a.OpenedAt().Compare(b.OpenedAt()), cmp.Compare(a.ID, b.ID)) })
	for i := range in.Alerts {
		a := &in.Alerts[i]
		a.Picture = r.around(in, a)
	}
}
