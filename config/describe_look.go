package config

import (
	"strings"
	"unicode"
)

func (p *prose) window(in *Indicator, w *Window) {
	if w.Trials > 0 || in.Measure == Proportion && in.ArrivalLooks {
		p.trialWindow(in, w)
		return
	}
	if in.SlotLooks {
		p.line("  Window %s: looked at every %s, %s a year.", w.Name, spanWords(in.slotLength(w.Step)), aboutMany(in.looksPerYear(w), "look"))
	}
	if in.ArrivalLooks {
		p.line("  Window %s: looked at when an event comes, over exactly the span of %s that ends with it (more events than usual only).",
			w.Name, lengthWords(in.slotLength(w.Slots)))
	}
}

func (p *prose) limit(in *Indicator) {
	if in.Allowance != nil {
		p.allowance(in, in.Allowance)
	} else {
		p.tails(in)
	}
	quiet := counted(in.Quiet, "look") + " in a row without a signal"
	if !in.SlotLooks {
		quiet = counted(in.Quiet, "slot") + " in a row by whose end no window signals any more"
	}
	p.line("  Alerts return after %s. Bounds are shown at %s%% confidence.", quiet, number(100-100*in.Alpha))
}

func (p *prose) tails(in *Indicator) {
	tails, each := "as many events or more", ""
	switch {
	case in.Upper && in.Lower:
		tails, each = "as many events or more, or that of as few or fewer,", " for each of the two"
	case in.Lower:
		tails = "as few events or fewer"
	}
	p.line("  A look signals when the chance of %s is at most %s if the usual rate holds: at most one look in %s does so by chance%s.",
		tails, number(in.PLimit), about(1/in.PLimit), each)
	if in.SlotLooks {
		p.line("  That is at most %s signalling looks %sby chance a year and series; neighbouring looks share their data, so alerts are fewer.",
			about(in.chanceSignals()), atSlots(in))
	}
}

func (p *prose) allowance(in *Indicator, a *Allowance) {
	whom := "on each series"
	if a.PerIndicator {
		whom = "over all series together"
	}
	p.line("  Allowance: %s in %s %s, over all windows and tails; what counts as a signal follows from it.",
		countedNumber(a.Alerts, "false alert"), aLength(a.Every), whom)
	if a.PerIndicator && a.Reserve > 0 {
		p.line("  Of it %s%% are kept for series yet to come.", number(100*a.Reserve))
	}
	const say = "tailbell limits says which counts signal then, and what they find."
	if a.PerIndicator {
		p.line("  An alert comes by chance at most about %s over all of them, and %s on each one of ten; %s",
			onceIn(a.PerYear()), onceIn(a.PerYear()*(1-a.Reserve)/10), say)
	} else {
		p.line("  An alert comes by chance at most about %s on a series, and %s on one or another of ten; %s",
			onceIn(a.PerYear()), onceIn(10*a.PerYear()), say)
	}
	switch {
	case a.Assurance > 0:
		p.line("  It is kept with %s%% confidence where the usual rate is estimated: critical counts are taken from that end of its bounds at which false alerts are most.", number(100*a.Assurance))
	case in.estimated():
		p.line("  Where the usual rate is estimated it is kept on average over what the estimate leaves open: a single series may have several times as many.")
	}
}

// onceIn says how often something happens that is expected so many times a year.
func onceIn(perYear float64) string {
	switch years := 1 / perYear; {
	case years > 0.99 && years < 1.01:
		return "once a year"
	case years >= 1:
		return "once in " + about(years) + " years"
	case years*365.2425 >= 1.5:
		return "once in " + about(years*365.2425) + " days"
	case years*365.2425*24 > 0.99 && years*365.2425*24 < 1.01:
		return "once an hour"
	case years*365.2425*24 >= 1.5:
		return "once in " + about(years*365.2425*24) + " hours"
	}
	return about(perYear/(365.2425*24)) + " times an hour"
}

// slotLength is the length of n slots.
func (in *Indicator) slotLength(n int) Every { return Every{N: n * in.Every.N, Unit: in.Every.Unit} }

// countedNumber writes "1 false alert" or "0.5 false alerts".
func countedNumber(f float64, noun string) string {
	if f == 1 {
		return "1 " + noun
	}
	return number(f) + " " + noun + "s"
}

// aLength writes a length as it follows "in": "a year", "5 years".
func aLength(e Every) string {
	words := spanWords(e)
	switch {
	case unicode.IsDigit(rune(words[0])):
		return words
	case words == "hour":
		return "an hour"
	}
	return "a " + words
}

// lengthWords writes a length as a number and a noun: "1 year", "28 days".
func lengthWords(e Every) string {
	words := spanWords(e)
	if strings.ContainsFunc(words, unicode.IsDigit) {
		return words
	}
	return "1 " + words
}
