package plant

import (
	"context"
	"fmt"
	"math"
	"slices"
	"strings"
	"time"

	"tailbell/config"
	"tailbell/exact"
	"tailbell/exact/resample"
	"tailbell/monitor"
	"tailbell/monitor/life"
)

// bound fills in the share and its bounds.
func (s *Share) bound(level float64) {
	if s.Of == 0 {
		s.Upper = 1
		return
	}
	s.Share = float64(s.Count) / float64(s.Of)
	s.Lower, s.Upper = exact.ClopperPearson(s.Count, s.Of, alphaOf(level))
}

// alphaOf is one minus the level, without the error that a difference leaves.
func alphaOf(level float64) float64 { return math.Round((1-level)*1e12) / 1e12 }

func days(from, to monitor.Instant) float64 { return float64(to-from) / 1e6 / 86400 }

// quartiles of the delays found, among so many in all; its bounds are the
// median until they are resampled.
func quartiles(found []float64, of int) *Delay {
	sorted := slices.Sorted(slices.Values(found))
	d := &Delay{First: quantile(sorted, 0.25), Median: quantile(sorted, 0.5), Third: quantile(sorted, 0.75)}
	d.Lower, d.Upper = d.Median, d.Median
	if half := (of+1)/2 - 1; half < len(sorted) {
		d.Half = &sorted[half]
	}
	return d
}

// quantile interpolates between order statistics (Hyndman and Fan 1996, The
// American Statistician 50, definition 7).
func quantile(sorted []float64, p float64) float64 {
	at := p * float64(len(sorted)-1)
	i := int(at)
	if i+1 >= len(sorted) {
		return sorted[len(sorted)-1]
	}
	return sorted[i] + float64((at-float64(i))*(sorted[i+1]-sorted[i]))
}

// resampledMedian gives percentile bounds of the median.
func (r *Rehearsal) resampledMedian(ctx context.Context, values []float64) (lower, upper float64, err error) {
	if len(values) < 2 {
		return values[0], values[0], nil
	}
	b, err := resample.Bootstrap(ctx, r.redraws(), resample.Blocks{Periods: len(values), Length: 1}, func(at []int) float64 {
		drawn := make([]float64, len(at))
		for i, k := range at {
			drawn[i] = values[k]
		}
		slices.Sort(drawn)
		return quantile(drawn, 0.5)
	})
	if err != nil {
		return 0, 0, err
	}
	lower, upper = b.Percentile(alphaOf(r.plan.Level))
	return lower, upper, nil
}

func (r *Rehearsal) redraws() resample.Plan {
	return resample.Plan{Draws: r.plan.Draws, Seed: r.plan.Seed, Workers: r.plan.Workers}
}

// report counts.
func (r *Rehearsal) report(ctx context.Context, runs []outcomes) (*Report, error) {
	p := r.plan
	in, err := p.indicator(0)
	if err != nil {
		return nil, err
	}
	out := &Report{
		Indicator: in.Name, Title: in.Title, Histories: p.Histories, Seed: p.Seed, Shape: p.Shape.String(),
		Length: fmt.Sprintf("%d%s", p.Length*in.Every.N, in.Every.Unit), Level: p.Level, Caution: Caution,
	}
	r.describe(out, runs)
	for s := range p.Setups {
		cfg, err := p.indicator(s)
		if err != nil {
			return nil, err
		}
		out.Setups = append(out.Setups, nameOf(p.Setups[s], cfg))
		for i := range p.Ratios {
			if err := r.found(ctx, out, cfg, s, i, runs); err != nil {
				return nil, err
			}
		}
		if err := r.falseAlerts(ctx, out, s, runs); err != nil {
			return nil, err
		}
	}
	r.predict(out)
	if len(p.Setups) == 2 {
		err = r.compare(ctx, out, runs)
	}
	return out, err
}

func nameOf(setup *config.Setup, in *config.Indicator) SetupName {
	n := SetupName{Name: setup.Name, Digest: setup.Digest, Limit: fmt.Sprintf("p at most %g at each look", in.PLimit)}
	if in.Allowance != nil {
		n.Limit = "allowance of " + in.Allowance.String() + " a series"
		if in.Allowance.PerIndicator {
			n.Limit = "allowance of " + in.Allowance.String() + " over all series"
		}
	}
	for i := range in.Windows {
		n.Windows = append(n.Windows, in.Windows[i].Name)
	}
	return n
}

// describe says how histories were made.
func (r *Rehearsal) describe(out *Report, runs []outcomes) {
	var names []string
	for i := range runs {
		names = append(names, runs[i].series)
		out.RefusedPlanted += runs[i].refused
	}
	slices.Sort(names)
	out.Series = len(slices.Compact(names))
	if r.real != nil {
		out.On = "real"
		out.How = fmt.Sprintf("Excesses were planted in a real history, in %d of its %d series, at places drawn evenly among those without missing slots", out.Series, len(r.real.all))
		if r.real.known != nil {
			out.How += " and away from the known episodes"
		}
		out.How += "; relative to the baseline's rate, on top of what was there. What people did is left out."
		return
	}
	v := r.invented
	out.On = "invented"
	parts := []string{fmt.Sprintf("Histories were invented slot by slot from the baseline, %.3g years of each looked at without and with the excess", runs[0].years)}
	if v.in.Exposure != config.Clock {
		parts = append(parts, fmt.Sprintf("each slot of %s has %s %s", v.in.Every, v.how.Exposure.String(), v.in.Unit))
	}
	if v.how.Drawn {
		parts = append(parts, "each with a true rate drawn from what the reference leaves open")
	} else if v.how.Rate > 0 {
		parts = append(parts, fmt.Sprintf("at a true rate of %.6g per %s", v.how.Rate, v.in.Unit))
	}
	if beside := r.beside(); beside != "" {
		parts = append(parts, beside)
	}
	out.How = strings.Join(parts, "; ") + "."
}

// beside says which other series an invented history has, and what that means
// for an allowance over all series; "" where neither matters.
func (r *Rehearsal) beside() string {
	shared := slices.ContainsFunc(r.plan.Setups, func(s *config.Setup) bool {
		return slices.ContainsFunc(s.Indicators, func(in config.Indicator) bool {
			return in.Name == r.plan.Indicator && in.Allowance != nil && in.Allowance.PerIndicator
		})
	})
	switch n := r.invented.how.Peers; {
	case n > 0 && shared:
		return fmt.Sprintf("each has %d other series beside it, which have their shares of what is allowed over all series", n)
	case n > 0:
		return fmt.Sprintf("each has %d other series beside it", n)
	case shared:
		return "no other series is beside it, so that it has all of what is allowed over all series for itself, and rings oftener than one among many: say how many others there are"
	}
	return ""
}

// found counts what became of the excesses of one ratio under one set-up.
func (r *Rehearsal) found(ctx context.Context, out *Report, in *config.Indicator, setup, ratio int, runs []outcomes) error {
	tail := 0
	if directionOf(r.plan.Ratios[ratio]) == life.Lower {
		tail = 1
	}
	for w := -1; w < len(in.Windows); w++ {
		f := Found{Setup: setup, Ratio: r.plan.Ratios[ratio]}
		if w >= 0 {
			f.Window = in.Windows[w].Name
		}
		var delays []float64
		for i := range runs {
			o, by := &runs[i].found[setup][ratio], &runs[i].chance[setup][tail]
			f.take(o, by, w)
			if due := o.dueIn(w); due != monitor.Never {
				delays = append(delays, days(o.from, due))
			}
		}
		f.InTime.bound(r.plan.Level)
		f.ByChance.bound(r.plan.Level)
		if len(delays) > 0 {
			f.Delay = quartiles(delays, len(runs))
			var err error
			if f.Delay.Lower, f.Delay.Upper, err = r.resampledMedian(ctx, delays); err != nil {
				return err
			}
		}
		out.Found = append(out.Found, f)
	}
	return nil
}

// dueIn is when the excess was found in time by a window, or by an alert for
// -1; Never if it was not.
func (o *outcome) dueIn(window int) monitor.Instant {
	switch {
	case window >= 0:
		return o.windows[window]
	case o.inTime:
		return o.due
	}
	return monitor.Never
}

// take counts one outcome, and what would have been seen without the excess.
func (f *Found) take(o, without *outcome, window int) {
	f.InTime.Of++
	f.ByChance.Of++
	if o.dueIn(window) != monitor.Never {
		f.InTime.Count++
	}
	if without.dueIn(window) != monitor.Never {
		f.ByChance.Count++
	}
	if window < 0 && o.late {
		f.Late++
	}
	if window < 0 && o.masked {
		f.Masked++
	}
}

func (r *Rehearsal) falseAlerts(ctx context.Context, out *Report, setup int, runs []outcomes) error {
	f := False{Setup: setup, Told: true}
	if r.real != nil {
		f.Told = r.real.known != nil
		for _, p := range r.real.all {
			f.Years += p.years
		}
		held := Hold(r.real.alerts[setup], r.real.known, r.plan.Level)
		held.Setup = setup
		if err := r.boundTimeliness(ctx, &held); err != nil {
			return err
		}
		out.Against = append(out.Against, held)
		f.Alerts = held.Predictive.Of - held.Predictive.Count
		if !f.Told {
			f.Alerts, f.Years = 0, 0
		}
	} else {
		for i := range runs {
			f.Alerts += runs[i].alerts[setup]
			f.Years += runs[i].years
		}
		if len(runs) > 1 {
			b, err := resample.Bootstrap(ctx, r.redraws(), resample.Blocks{Periods: len(runs), Length: 1}, func(at []int) float64 {
				n := int64(0)
				for _, k := range at {
					n += runs[k].alerts[setup]
				}
				return float64(n) / f.Years
			})
			if err != nil {
				return err
			}
			f.Resampled[0], f.Resampled[1] = b.Percentile(alphaOf(r.plan.Level))
		}
	}
	f.rate(r.plan.Level)
	out.False = append(out.False, f)
	return nil
}

// boundTimeliness gives bounds to the median delay of the episodes found.
func (r *Rehearsal) boundTimeliness(ctx context.Context, held *Record) (err error) {
	var delays []float64
	for i := range held.Episodes {
		if held.Episodes[i].Found {
			delays = append(delays, held.Episodes[i].Days)
		}
	}
	if len(delays) > 0 {
		held.Timeliness.Lower, held.Timeliness.Upper, err = r.resampledMedian(ctx, delays)
	}
	return err
}

func (f *False) rate(level float64) {
	if f.Years <= 0 {
		f.Told = false
		return
	}
	f.Rate = float64(f.Alerts) / f.Years
	f.Lower, f.Upper = exact.Garwood(f.Alerts, alphaOf(level))
	f.Lower, f.Upper = f.Lower/f.Years, f.Upper/f.Years
}

// predict works out predictive values.
func (r *Rehearsal) predict(out *Report) {
	half := 1 - alphaOf(r.plan.Level)/2 // both at this level hold together at Level
	for _, f := range out.Found {
		wrong := out.False[f.Setup]
		if f.Window != "" || !wrong.Told {
			continue
		}
		right := f.InTime
		right.Count += f.Late
		right.bound(half)
		wrong.rate(half)
		value := func(share, rate, often float64) float64 {
			if share == 0 {
				return 0
			}
			return often * share / (often*share + rate)
		}
		for _, often := range r.plan.Frequencies {
			out.Predict = append(out.Predict, Value{
				Setup: f.Setup, Ratio: f.Ratio, Frequency: often,
				Value: value(right.Share, wrong.Rate, often), Lower: value(right.Lower, wrong.Upper, often), Upper: value(right.Upper, wrong.Lower, often),
			})
		}
	}
}

// compare pairs two set-ups.
func (r *Rehearsal) compare(ctx context.Context, out *Report, runs []outcomes) error {
	for i, ratio := range r.plan.Ratios {
		p := Pair{Ratio: ratio, P: 1}
		var later []float64
		for k := range runs {
			a, b := &runs[k].found[0][i], &runs[k].found[1][i]
			switch {
			case a.inTime && b.inTime:
				p.Both++
				later = append(later, days(a.due, b.due))
			case a.inTime:
				p.OnlyFirst++
			case b.inTime:
				p.OnlySecond++
			default:
				p.Neither++
			}
		}
		if n := p.OnlyFirst + p.OnlySecond; n > 0 {
			p.P = exact.NewBinomial(n, 0.5).TwoSided(p.OnlyFirst, exact.Central)
		}
		if len(later) > 0 {
			l := Later{Median: quantile(slices.Sorted(slices.Values(later)), 0.5)}
			var err error
			if l.Lower, l.Upper, err = r.resampledMedian(ctx, later); err != nil {
				return err
			}
			p.Later = &l
		}
		out.Pairs = append(out.Pairs, p)
	}
	return nil
}

// Days writes a number of days as a duration of whole minutes.
func Days(d float64) time.Duration {
	return time.Duration(d * 24 * float64(time.Hour)).Round(time.Minute)
}
