package config

import (
	"fmt"
	"slices"
	"strings"
	"time"
)

func (p *prose) baseline(in *Indicator, i int) {
	b := &in.Baselines[i]
	who := "All series"
	all := NewPattern("**")
	switch {
	case b.Sums.text != "":
		who = "Sums " + b.Sums.String()
	case b.Series != all:
		who = "Series " + b.Series.String()
	case slices.ContainsFunc(in.Baselines[:i], func(e Baseline) bool { return e.Series != all && e.Sums.text == "" }):
		who = "All other series"
	}
	p.line("  %s%s: judged by %s%s%s.", who, validText(in, b), usualText(in, b), marginText(in, b), origin(b))
	p.history(in, b)
	p.spread(in, b)
	if b.Strata != nil {
		p.line("    The %s multiplied by a factor for each %s, from %s to %s.", rateOrOdds(in), stratumNoun(b.Strata.By),
			number(slices.Min(b.Strata.Factors)), number(slices.Max(b.Strata.Factors)))
	}
	if b.Delay != nil {
		p.line("    Late reports: %s; of recent slots so much less is expected.", delayText(b.Delay))
	}
}

func validText(in *Indicator, b *Baseline) string {
	var parts []string
	if !b.From.IsZero() {
		parts = append(parts, "after "+b.From.In(in.Zone).Format(time.RFC3339))
	}
	if !b.To.IsZero() {
		parts = append(parts, "not after "+b.To.In(in.Zone).Format(time.RFC3339))
	}
	if len(parts) == 0 {
		return ""
	}
	return ", for windows that end " + strings.Join(parts, " and ")
}

func usualText(in *Indicator, b *Baseline) string {
	length := lengthWords(in.slotLength(b.SpanSlots))
	switch b.Kind {
	case Known:
		if in.Measure == Proportion {
			return "the known proportion of " + number(b.Rate)
		}
		return fmt.Sprintf("the known rate of %s %s per %s", number(b.Rate*in.Per), in.EventNoun, perUnit(in))
	case Reference:
		return fmt.Sprintf("a reference of %s %s in %s", grouped(b.Events), in.EventNoun, ofUnit(b.Exposure, in.Unit))
	case Trailing:
		return fmt.Sprintf("what each counted itself in %s that end %s before", length, lengthWords(in.slotLength(b.GapSlots)))
	case Peers:
		return fmt.Sprintf("what all other series of %s counted in %s", in.Name, length)
	}
	return ""
}

func marginText(in *Indicator, b *Baseline) string {
	ratio := "a ratio"
	if in.Measure == Proportion && b.Kind != Known {
		ratio = "an odds ratio"
	}
	switch {
	case b.Margin == 1:
		return ""
	case in.Upper && in.Lower:
		return fmt.Sprintf(", %s from 1/%s to %s is accepted", ratio, number(b.Margin), number(b.Margin))
	case in.Lower:
		return fmt.Sprintf(", %s down to 1/%s is accepted", ratio, number(b.Margin))
	}
	return fmt.Sprintf(", %s up to %s is accepted", ratio, number(b.Margin))
}

func origin(b *Baseline) string {
	var parts []string
	if b.Version != "" {
		parts = append(parts, "version "+b.Version)
	}
	if b.Source != "" {
		parts = append(parts, "source: "+b.Source)
	}
	if len(parts) == 0 {
		return " (neither version nor source given)"
	}
	return " (" + strings.Join(parts, "; ") + ")"
}

// history says how a history is counted, and what it can't see.
func (p *prose) history(in *Indicator, b *Baseline) {
	if b.Kind != Trailing && b.Kind != Peers {
		return
	}
	enough := ""
	switch {
	case b.MinEvents == 1:
		enough = "; with no event in it a look is withheld"
	case b.MinEvents > 1:
		enough = fmt.Sprintf("; with fewer than %s in it a look is withheld", counted(int(b.MinEvents), "event"))
	}
	p.line("    That history is counted anew every %s%s.", spanWords(b.Refresh), enough)
	if b.Kind == Peers {
		p.line("    A change that is common to all series goes unseen.")
	} else {
		p.line("    A change that creeps becomes what is usual.")
	}
}

func (p *prose) spread(in *Indicator, b *Baseline) {
	if b.Spread == 1 {
		return
	}
	law, of := "negative binomial", "their mean"
	if in.Measure == Proportion {
		law, of = "beta-binomial", "that of the binomial"
	}
	exactness := "the test is exact for that law"
	if b.Kind != Known {
		exactness = "the test is predictive: with an estimated rate no exact test is free of nuisance parameters"
	}
	p.line("    Spread: the variance of counts is %s times %s (%s); %s.", number(b.Spread), of, law, exactness)
}

func rateOrOdds(in *Indicator) string {
	if in.Measure == Proportion {
		return "odds are"
	}
	return "rate is"
}

func stratumNoun(by StrataBy) string {
	switch by {
	case ByHourOfWeek:
		return "hour of the week"
	case ByWeekday:
		return "weekday"
	case ByMonth:
		return "month of the year"
	}
	return by.String()
}

// delayText names up to four steps of a delay, the first and the last included.
func delayText(d *Delay) string {
	n := len(d.Ages)
	var parts []string
	for _, i := range slices.Compact([]int{0, n / 3, 2 * n / 3, n - 1}) {
		share := number(100*d.Reported[i]) + "%"
		if i == n-1 {
			share = "all"
		}
		when := "at its end"
		if d.Ages[i] > 0 {
			when = elapsed(d.Ages[i]) + " after it"
		}
		parts = append(parts, share+" "+when)
	}
	return "of a slot's events are known " + strings.Join(parts, ", ")
}
