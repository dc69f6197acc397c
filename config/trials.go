package config

import (
	"fmt"
	"slices"
	"strconv"
	"strings"
	"time"
)

// maxTrials is the most trials that a window holds.
const maxTrials = 1_000_000

// parseTrials reads a window such as "200 trials". ok is false for a text that
// does not speak of trials; problem says what is wrong with one that does.
func parseTrials(text string) (n int64, problem string, ok bool) {
	digits, found := strings.CutSuffix(text, "trials")
	if !found {
		if digits, found = strings.CutSuffix(text, "trial"); !found {
			return 0, "", false
		}
	}
	n, err := strconv.ParseInt(strings.TrimSuffix(digits, " "), 10, 64)
	switch {
	case err != nil || text != strconv.FormatInt(n, 10)+" trials" && n != 1:
		return 0, "is not a whole number and the word trials", true
	case n < 2 || n > maxTrials:
		return 0, "is not between 2 and " + grouped(maxTrials) + " trials", true
	}
	return n, "", true
}

// ParseTrials reads a window such as "200 trials", and reports whether the text is
// one.
func ParseTrials(text string) (n int64, ok bool) {
	n, problem, ok := parseTrials(text)
	return n, ok && problem == ""
}

// checkTrials refuses windows that are never looked at: those of trials are looked
// at when events come, and of a proportion those of time when slots have settled.
func (s section) checkTrials(in *Indicator) {
	trials := slices.IndexFunc(in.Windows, func(w Window) bool { return w.Trials > 0 })
	spans := slices.IndexFunc(in.Windows, func(w Window) bool { return w.Trials == 0 })
	if trials >= 0 && in.Retire > 0 {
		s.fault("retire", fmt.Sprintf("the last %s are kept however long ago they were, so a series would never end", in.Windows[trials].Name),
			"leave it out, and say when a series closes: tailbell series change --what closing")
	}
	switch {
	case trials >= 0 && in.Measure != Proportion:
		s.fault("windows", fmt.Sprintf("%q counts trials, and a rate has none", in.Windows[trials].Name), `write measure = "proportion", or a span such as "28d"`)
	case trials >= 0 && !in.ArrivalLooks:
		s.fault("looks", fmt.Sprintf("the last %s are looked at when events come, and looks asks for slots only", in.Windows[trials].Name),
			`write looks = "arrival", or ["slot", "arrival"] beside windows of time`)
	case in.Measure != Proportion || !in.ArrivalLooks || len(in.Windows) == 0:
	case trials < 0:
		s.fault("windows", "looks at events need trials at every moment, so that of a proportion the last so many are looked at, and there is no such window",
			`write e.g. windows = ["200 trials"], or looks = "slot"`)
	case spans >= 0 && !in.SlotLooks:
		s.fault("windows", fmt.Sprintf("%q is a span of time, which of a proportion is looked at when slots have settled", in.Windows[spans].Name),
			`leave it out, or add "slot" to looks`)
	case spans < 0 && in.SlotLooks:
		s.fault("looks", "asks for looks at slots, and the windows are of trials, which are looked at when events come", `write looks = "arrival", or add a window such as "28d"`)
	}
}

// checkAlike refuses trials that are unlike in a window of the last trials.
func (s section) checkAlike(in *Indicator, b *Baseline) {
	if in.Measure != Proportion || !in.ArrivalLooks {
		return
	}
	const mend = `leave it out, or write looks = "slot"`
	if b.Strata != nil {
		s.fault("strata", "multiplies the odds of whole slots, and the last trials cut through them", mend)
	}
	if b.Spread > 1 {
		s.fault("spread", "is that of whole slots, and the last trials cut through them", mend)
	}
}

// trialWindow describes a window of a proportion that is looked at when events
// come, or one of time beside it.
func (p *prose) trialWindow(in *Indicator, w *Window) {
	if w.Trials == 0 {
		p.line("  Window %s: looked at every %s, %s a year.", w.Name, spanWords(in.slotLength(w.Step)), aboutMany(in.looksPerYear(w), "look"))
		return
	}
	p.line("  Window %s: looked at when an event comes, over the last %s %s that end with it (more events than usual only).", w.Name, grouped(w.Trials), in.Unit)
	p.line("    What comes at one moment is never split: of several at once it holds as many moments as it takes to reach %s.", grouped(w.Trials))
	if in.Allowance != nil {
		p.line("    How many %s a year brings is taken to be what the busiest four weeks of a series bring, of those within the horizon.", in.Unit)
	}
}

// atSlots says which looks are meant where there are others besides.
func atSlots(in *Indicator) string {
	if in.ArrivalLooks {
		return "at slots "
	}
	return ""
}

// fourWeeks is so many slots, one at least.
func (in *Indicator) fourWeeks() int {
	return max(1, int(28*24*time.Hour/in.Every.shortest()))
}
