package estimate

import (
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"

	"tailbell/config"
	"tailbell/exact"
)

// A p-value under believed is taken for a finding in the recommendation: there
// are several tests, and each is made on the same history.
const believed = 0.01

// Strata are recommended only from a history of so many cycles: in fewer a
// single excess looks like a season.
const leastCycles = 3

// advise writes the recommendation and the stanza.
func (a *analysis) advise() {
	if a.r.Pooled.Events == 0 {
		a.r.Stanza = a.stanza(nil)
		a.say("There were no events at all: the rate is at most %s. A longer history, or a stated rate (kind = \"known\"), is needed.",
			a.perUnit(a.r.Pooled.Upper))
		return
	}
	worst := a.worstSpread()
	a.r.Stanza = a.stanza(worst)
	a.adviseFew()
	a.adviseSpread(worst)
	a.adviseSeasons(worst != nil)
	a.adviseDrift()
	a.adviseBetween()
	a.adviseTogether()
	a.advisePeriods()
	a.adviseGaps()
}

func (a *analysis) say(format string, args ...any) {
	a.r.Advice = append(a.r.Advice, fmt.Sprintf(format, args...))
}

func (a *analysis) perUnit(rate float64) string {
	return figure(rate) + " per " + a.PerUnit()
}

// PerUnit writes what a rate is per: "1000 device-days", or "corps-year".
func (h *History) PerUnit() string {
	in := h.Indicator
	if one, plural := strings.CutSuffix(in.Unit, "s"); in.Per == 1 && plural && !strings.HasSuffix(one, "s") {
		return one
	}
	if in.Per == 1 {
		return in.Unit
	}
	return strconv.FormatFloat(in.Per, 'f', -1, 64) + " " + in.Unit
}

// adviseFew says what the uncertainty of the rate does to false alerts.
func (a *analysis) adviseFew() {
	low, high, ok := a.falseAlerts()
	if !ok {
		return
	}
	what := "what they are at the estimate"
	if a.Indicator.Allowance != nil {
		what = "the allowance"
	}
	text := fmt.Sprintf("%d events: the false alerts at the baseline's bounds would be %s and %s times %s",
		a.r.Pooled.Events, figure(low), figure(high), what)
	if high > 3 {
		text += ": count longer, or keep the estimate's doubt in the test (kind = \"reference\", not \"known\")"
	}
	a.say("%s.", text)
}

// falseAlerts compares the crossings of the first span of time if the true rate
// lies at the bounds of the estimate with those if it is the estimate.
func (a *analysis) falseAlerts() (low, high float64, ok bool) {
	in, p := a.Indicator, a.r.Pooled
	exposure, slots := 0.0, 0
	for i := range a.Series {
		exposure += a.Series[i].exposure()
		slots += len(a.Series[i].Slots)
	}
	windows := spans(in)
	if len(windows) == 0 {
		return 0, 0, false
	}
	w := windows[0]
	limit := in.PLimit
	if limit == 0 {
		limit = 0.001
	}
	slot := exposure / float64(slots)
	window := slot * float64(w.Slots)
	var law tailLaw = exact.TwoRate{RefEvents: p.Events, Exposure: window, RefExposure: exposure}
	if a.proportion() {
		law = exact.TwoProportion{RefEvents: p.Events, RefTrials: int64(math.Round(exposure)), Trials: int64(math.Round(window))}
	}
	c := crossing{h: a.History, slots: w.Slots, step: w.Step, slot: slot, upper: in.Upper}
	if in.Upper {
		c.critical, _, ok = law.CriticalUpper(limit)
	} else {
		c.critical, _, ok = law.CriticalLower(limit)
	}
	if !ok || c.critical > 100_000 {
		return 0, 0, false
	}
	usual := c.rate(p.Rate / in.Per)
	low, high = c.rate(p.Lower/in.Per)/usual, c.rate(p.Upper/in.Per)/usual
	if !in.Upper {
		low, high = high, low
	}
	return low, high, usual > 0 && !math.IsNaN(low+high)
}

// crossing is a look that signals where the one before it did not: the events
// of the slots that both share, of those that left and of those that entered
// are independent.
type crossing struct {
	h           *History
	slots, step int
	slot        float64 // exposure of one
	critical    int64
	upper       bool
}

// rate is the probability that a look is a crossing at a true rate.
func (c *crossing) rate(r float64) float64 {
	moved := min(c.step, c.slots)
	part, shared := c.h.lawAt(r, c.slot*float64(moved)), c.h.lawAt(r, c.slot*float64(c.slots-moved))
	if c.upper {
		return exact.CrossingUpper(part, shared, part, c.critical, c.critical)
	}
	return exact.CrossingLower(part, shared, part, c.critical, c.critical)
}

// worstSpread returns the greatest spread within series that is believed, among
// a slot and the windows; nil if there is none.
func (a *analysis) worstSpread() *Spread {
	var worst *Spread
	for i := range a.r.Within {
		s := &a.r.Within[i]
		isWindow := s.Slots == 1 || slices.ContainsFunc(spans(a.Indicator), func(w config.Window) bool { return w.Slots == s.Slots })
		if isWindow && s.Chance.P < believed && s.Phi > 1 && (worst == nil || s.Phi > worst.Phi) {
			worst = s
		}
	}
	return worst
}

func (a *analysis) adviseSpread(worst *Spread) {
	first := a.r.Within[0]
	if first.Mean == 0 {
		a.say("Fewer than two slots have exposure, or every trial was an event: nothing can be said of spread.")
		return
	}
	if worst == nil {
		text := fmt.Sprintf("The spread over %s is %s times what chance gives, p = %s: chance explains it", first.Length, figure(first.Phi), probability(first.Chance.P))
		switch {
		case first.Unbounded:
			text += ", but so few events can't rule out any spread"
		case first.Bound > 0:
			text += fmt.Sprintf(", though up to %s can't be ruled out", figure(first.Bound))
		}
		a.say("%s.", text)
		return
	}
	text := fmt.Sprintf("The spread over %s is %s times what chance gives, p = %s", worst.Length, figure(worst.Phi), probability(worst.Chance.P))
	if worst.Bound > 0 {
		text += fmt.Sprintf(" (up to %s can't be ruled out)", figure(worst.Bound))
	}
	if _, _, drift := a.drift(); drift {
		a.say("%s. A test that takes these counts for Poisson or binomial would ring too often.", text)
		return
	}
	remedy := "use spread"
	if by := a.strataFound(); len(by) > 0 {
		remedy += ", or stratify by " + by[0].By.String()
		if left, ok := a.leftAfter(by[0], worst.Slots); ok {
			remedy += fmt.Sprintf(", which leaves %s", figure(left))
		}
	}
	a.say("%s: %s. A test that takes these counts for Poisson or binomial would ring too often.", text, remedy)
}

// strataFound returns the effects that are believed and seen often enough, the
// clearest first.
func (a *analysis) strataFound() []Effect {
	var found []Effect
	for _, e := range a.r.Effects {
		if e.Chance.P < believed && e.Cycles >= leastCycles {
			found = append(found, e)
		}
	}
	slices.SortStableFunc(found, func(x, y Effect) int {
		switch {
		case x.Chance.P < y.Chance.P:
			return -1
		case x.Chance.P > y.Chance.P:
			return 1
		}
		return 0
	})
	return found
}

// leftAfter is the spread within series that strata leave.
func (a *analysis) leftAfter(e Effect, slots int) (float64, bool) {
	if a.proportion() {
		return 0, false
	}
	series := make([]Series, len(a.Series))
	for i := range series {
		series[i].Slots = slices.Clone(a.Series[i].Slots)
		for j := range series[i].Slots {
			s := &series[i].Slots[j]
			s.Exposure *= e.Strata[e.By.of(s.Start.Time().In(a.Indicator.Zone))].Factor
			if s.Exposure == 0 {
				s.Events = 0
			}
		}
	}
	t := spreadTable(false, series, slots)
	if t.mean() == 0 {
		return 0, false
	}
	return t.statistic(t.observed) / t.mean(), true
}

func (a *analysis) adviseSeasons(spread bool) {
	for _, e := range a.r.Effects {
		low, high := e.Strata[0], e.Strata[0]
		for _, s := range e.Strata {
			if s.Expected > 0 && s.Factor < low.Factor {
				low = s
			}
			if s.Expected > 0 && s.Factor > high.Factor {
				high = s
			}
		}
		cycle := "years"
		if e.By != Month {
			cycle = "weeks"
		}
		switch {
		case e.Chance.P >= believed:
		case e.Cycles < leastCycles:
			a.say("The rate differs by %s (%s %s times, %s %s times the usual; p = %s), but %s %s can't tell a season from a single excess.",
				e.By, low.Label, factor(low.Factor), high.Label, factor(high.Factor), probability(e.Chance.P), figure(e.Cycles), cycle)
		default:
			text := ""
			if spread {
				text = " Part of it may be the spread, which this p does not know of."
			}
			if e.By == Weekday && a.wholeWeeks() {
				text += " Windows of whole weeks hold every weekday alike, so strata would change little."
			}
			a.say("The rate differs by %s: %s %s times, %s %s times the usual, p = %s.%s",
				e.By, low.Label, factor(low.Factor), high.Label, factor(high.Factor), probability(e.Chance.P), text)
		}
	}
}

// wholeWeeks reports whether every window is of whole weeks, as those of trials
// are not.
func (a *analysis) wholeWeeks() bool {
	return a.Indicator.Every == (config.Every{N: 1, Unit: config.Day}) &&
		!slices.ContainsFunc(a.Indicator.Windows, func(w config.Window) bool { return w.Trials > 0 || w.Slots%7 != 0 })
}

// drift returns the spread over a slot and the greatest one that is believed,
// and reports whether spread grows so much that no constant one describes it,
// nor a season that was found.
func (a *analysis) drift() (first, last Spread, found bool) {
	first, last = a.r.Within[0], a.r.Within[0]
	for _, s := range a.r.Within[1:] {
		if s.Chance.P < believed && s.Phi > last.Phi {
			last = s
		}
	}
	grows := func(from, to float64) bool { return to > 1.5*max(from, 1) }
	if last.Slots == 1 || !grows(first.Phi, last.Phi) {
		return first, last, false
	}
	if by := a.strataFound(); len(by) > 0 {
		short, ok := a.leftAfter(by[0], first.Slots)
		long, ok2 := a.leftAfter(by[0], last.Slots)
		return first, last, !ok || !ok2 || grows(short, long)
	}
	return first, last, true
}

func (a *analysis) adviseDrift() {
	if first, last, found := a.drift(); found {
		a.say("Spread grows from %s over %s to %s over %s: the rate drifts, or excesses are still in the history. A constant spread does not describe that; "+
			"look at the periods that stand out, or take a shorter history (--from).", figure(first.Phi), first.Length, figure(last.Phi), last.Length)
	}
}

func (a *analysis) adviseBetween() {
	if a.r.Between == nil || a.r.Between.P >= believed {
		return
	}
	var apart []string
	for i := range a.r.Series {
		if s := &a.r.Series[i]; s.Adjusted < 0.05 {
			apart = append(apart, fmt.Sprintf("%s (%s times)", s.Name, factor(s.Rate.Rate/a.r.Pooled.Rate)))
		}
	}
	text := fmt.Sprintf("The series differ, p = %s: one baseline does not serve them all", probability(a.r.Between.P))
	const most = 5
	switch {
	case len(apart) > most:
		text += fmt.Sprintf("; %d stand apart from the common rate, among them %s", len(apart), strings.Join(apart[:most], ", "))
	case len(apart) > 0:
		text += "; from the common rate stand apart " + strings.Join(apart, ", ")
	}
	a.say("%s. Give those that differ a baseline of their own (--series).", text)
}

// adviseTogether says if all series rise and fall together.
func (a *analysis) adviseTogether() {
	for _, s := range a.r.Summed {
		if s.Chance.P >= believed || s.Phi <= 1.2 {
			continue
		}
		a.say("The sum of all series over %s spreads %s times what chance gives, p = %s: something common to them comes and goes. "+
			"A baseline from peers would not see it.", s.Length, figure(s.Phi), probability(s.Chance.P))
		return
	}
}

// advisePeriods names the periods that stand out: of single series, if there
// are several.
func (a *analysis) advisePeriods() {
	found := a.r.Excesses
	if len(a.Series) == 1 {
		for _, p := range a.r.Stability.marked() {
			found = append(found, Excess{a.Series[0].Name, p})
		}
	}
	if len(found) == 0 {
		return
	}
	const most = 8
	var parts []string
	for _, x := range found[:min(most, len(found))] {
		text := fmt.Sprintf("%s with %d events where %s were to be expected", a.date(x.Start), x.Events, figure(x.Expected))
		if len(a.Series) > 1 {
			text = x.Series + " " + text
		}
		parts = append(parts, text)
	}
	more := ""
	if n := len(found) - most; n > 0 {
		more = fmt.Sprintf("; and %d more", n)
	}
	a.say("Stand out: %s%s (periods of %s). Leave their spans out only if people have found them to be real; leaving out what merely stood out bends the baseline.",
		strings.Join(parts, "; "), more, a.r.Stability.Length)
}

func (a *analysis) adviseGaps() {
	missing, used, overfull := 0, 0, 0
	for i := range a.Series {
		missing += a.Series[i].Missing
		overfull += a.Series[i].Overfull
		used += len(a.Series[i].Slots)
	}
	if missing*20 > used {
		a.say("%d of %d slots lack a count or an exposure and were left out: are they missing at random?", missing, missing+used)
	}
	if overfull > 0 {
		a.say("%d slots have more events than trials, or events without exposure, and were left out.", overfull)
	}
}

// factor writes a ratio.
func factor(x float64) string {
	if x > 0.1 && x < 10 {
		return strconv.FormatFloat(x, 'f', 2, 64)
	}
	return figure(x)
}

// figure writes a number with two figures or, from 10 on, three.
func figure(x float64) string {
	switch {
	case x == 0:
		return "0"
	case math.Abs(x) >= 1e6:
		return strconv.FormatFloat(x, 'g', 3, 64)
	case math.Abs(x) >= 100:
		return strconv.FormatFloat(x, 'f', 0, 64)
	case math.Abs(x) >= 0.95:
		return strconv.FormatFloat(x, 'f', 1, 64)
	}
	return strconv.FormatFloat(x, 'g', 2, 64)
}

func probability(p float64) string { return strconv.FormatFloat(p, 'g', 2, 64) }
