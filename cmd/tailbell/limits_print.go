package main

import (
	"fmt"
	"io"
	"strings"

	"tailbell/config"
	"tailbell/monitor/planning"
)

// limitsCaution stands at the end of what is printed and drawn.
const limitsCaution = "A signal is a statistical finding: it diagnoses nothing and names no cause. Silence is no proof of safety: a change may be missed. " +
	"Local policy, local codes and licensed practice decide what is done, and what is accepted."

// limitsJSON is what --json prints.
type limitsJSON struct {
	Indicator string             `json:"indicator"`
	Allowance string             `json:"allowance,omitempty"`
	PLimit    float64            `json:"p_limit,omitempty"`
	Exposure  string             `json:"exposure"`
	InAll     *limitsInAll       `json:"in_all,omitempty"`
	Withheld  []string           `json:"withheld,omitempty"`
	Seed      uint64             `json:"seed"`
	Reports   []*planning.Report `json:"reports"`
	Caution   string             `json:"caution"`
}

// limitsInAll is what all series together are predicted to bring a year.
type limitsInAll struct {
	Series  int64   `json:"series"`
	PerYear float64 `json:"false_alerts_a_year"`
	Low     float64 `json:"false_alerts_a_year_low"`
	High    float64 `json:"false_alerts_a_year_high"`
}

// tell prints what was answered.
func (o *limitsOptions) tell(w io.Writer, groups []*limitsGroup) error {
	if !o.asJSON {
		p := &limitsPage{baselinePage: baselinePage{width: widthOf(w)}, seed: o.seed}
		for i, g := range groups {
			if i > 0 {
				p.line("")
			}
			p.group(g)
		}
		p.wrap(limitsCaution)
		_, err := w.Write(p.Bytes())
		return err
	}
	var list []limitsJSON
	for _, g := range groups {
		x := limitsJSON{
			Indicator: g.in.Name, PLimit: g.in.PLimit, Exposure: g.from, Withheld: g.withheld, Seed: o.seed, Reports: g.reports, Caution: limitsCaution,
		}
		if n := g.series(); n > 0 {
			perYear, low, high := g.inAll()
			x.InAll = &limitsInAll{n, perYear, low, high}
		}
		if g.in.Allowance != nil {
			x.Allowance = g.in.Allowance.String()
		}
		list = append(list, x)
	}
	return writeJSON(w, list)
}

// limitsPage prints answers for people.
type limitsPage struct {
	baselinePage
	seed uint64
}

func (p *limitsPage) group(g *limitsGroup) {
	r := g.full()
	p.head(g, r)
	p.limits(g, r)
	p.found(g, r)
	p.late(g, r)
	p.steps(g, r)
	p.others(g)
	for _, x := range r.Parts {
		if x.Advice != "" {
			p.wrap(partName(&x) + ": " + x.Advice)
		}
	}
}

func (p *limitsPage) head(g *limitsGroup, r *planning.Report) {
	in := g.in
	title := fmt.Sprintf("%s (%s)", in.Title, in.Name)
	if r.Series != "" {
		title += ": " + seriesWords(r.Series)
	}
	switch n := len(g.reports); {
	case g.byBaseline:
		title += fmt.Sprintf(", the first of %d baselines", n)
	case n > 1:
		title += fmt.Sprintf(", the middle one of %d series by exposure", n)
	}
	p.line("%s", title)
	kind := "known"
	if g.questions[g.chosen].Plan.Law.Estimated {
		kind = "estimated"
	}
	p.line("usual: %s %s per %s (%s); %s %s a slot of %s, %s%s", short(r.UsualRate*in.Per), in.EventNoun, perWords(in), kind,
		short(r.Exposure), in.Unit, in.Every, g.from, varyWords(r.Vary))
	p.trials(g)
	switch a := in.Allowance; {
	case a == nil:
		p.line("limit: each look signals at p <= %s", short(in.PLimit))
	case a.PerIndicator:
		p.line("allowance: %s over all series, %s a year on this one", a, short(g.questions[g.chosen].Plan.PerYear))
	default:
		p.line("allowance: %s on each series, over all windows and tails", a)
	}
}

func perWords(in *config.Indicator) string {
	if in.Per == 1 {
		return strings.TrimSuffix(in.Unit, "s")
	}
	return short(in.Per) + " " + in.Unit
}

func varyWords(vary float64) string {
	if vary == 0 {
		return ", taken as steady"
	}
	return fmt.Sprintf(", in any order within %s %% of that", short(100*vary))
}

func partName(x *planning.Part) string {
	name := x.Window
	if x.Looks == "arrival" {
		name += " at events"
	}
	if x.Tail == "lower" {
		name += ", too few"
	}
	return name
}

// limits is the table of critical counts and false alerts.
func (p *limitsPage) limits(g *limitsGroup, r *planning.Report) {
	estimated := g.questions[g.chosen].Plan.Law.Estimated
	p.line("\nLIMITS")
	head := []string{"window", "expected", "signals at", "attained size", "false alerts a year", "once in", "which is"}
	if estimated {
		head = append(head, "at the baseline's bounds")
	}
	rows := [][]string{head}
	for i := range r.Parts {
		x := &r.Parts[i]
		row := []string{partName(x), short(x.Expected), signalsAt(x), short(x.Size), short(x.PerYear), onceIn(x.PerYear), x.Basis}
		if x.Critical == nil {
			row[3], row[4], row[5], row[6] = "-", "0", "-", "-"
		}
		if estimated {
			row = append(row, short(x.Low)+" to "+short(x.High))
		}
		rows = append(rows, row)
	}
	p.table(rows)
	most := "at most"
	if estimated && g.questions[g.chosen].Plan.Assurance == 0 {
		most = "on average at most"
	}
	text := fmt.Sprintf("In all %s %s false alerts a year on this series, one in %s.", most, short(r.PerYear), onceIn(r.PerYear))
	if estimated {
		text += fmt.Sprintf(" If the usual rate truly lies at the bounds of its estimate, %s to %s: one wrong reference rings for years.", short(r.Low), short(r.High))
	}
	if n := g.series(); n > 1 {
		perYear, _, _ := g.inAll()
		text += fmt.Sprintf(" On all %s series %s a year.", thousands(n), short(perYear))
	}
	p.wrap(text)
	p.wrap("Expected and critical counts and attained sizes are exact for the law named. False alerts: \"exact\" is the expected number of crossings; " +
		"\"upper bound\" holds whatever the exposures are within their range; \"average\" and \"assured\" are what an estimated baseline leaves open.")
}

func signalsAt(x *planning.Part) string {
	switch {
	case x.Critical == nil:
		return "never"
	case x.Tail == "lower" && *x.Critical == 0:
		return "0"
	case x.Tail == "lower":
		return fmt.Sprintf("%d or fewer", *x.Critical)
	}
	return fmt.Sprintf("%d or more", *x.Critical)
}

// onceIn writes how long it takes until one is expected.
func onceIn(perYear float64) string {
	switch years := 1 / perYear; {
	case !(perYear > 0):
		return "-"
	case years >= 1e6:
		return "over a million years"
	case years >= 1:
		return short(years) + " years"
	case years*365.2425 >= 1:
		return short(years*365.2425) + " days"
	default:
		return short(years*365.2425*24) + " hours"
	}
}

// found is the table of the ratios that looks find.
func (p *limitsPage) found(g *limitsGroup, r *planning.Report) {
	p.line("\nWHAT A LOOK FINDS")
	rows := [][]string{{"window", "50 % chance", "80 %", "95 %"}}
	for i := range r.Parts {
		row := []string{partName(&r.Parts[i])}
		for _, f := range r.Parts[i].Found {
			row = append(row, ratioText(f.Ratio))
		}
		rows = append(rows, row)
	}
	p.table(rows)
	p.wrap(fmt.Sprintf("Ratios to the usual rate that a look signals at with that chance when its whole window lies under them; exact%s.", ifEstimated(g)))
}

func ifEstimated(g *limitsGroup) string {
	if g.questions[g.chosen].Plan.Law.Estimated {
		return " if the usual rate is what was estimated"
	}
	return ""
}

func ratioText(r *float64) string {
	if r == nil {
		return "-"
	}
	return short(*r) + " times"
}

// late is the table of delays.
func (p *limitsPage) late(g *limitsGroup, r *planning.Report) {
	if len(r.Delays) == 0 {
		return
	}
	p.line("\nHOW LONG CHANGES GO UNNOTICED (simulated)")
	every := g.in.Every
	rows := [][]string{{"window", "ratio", "half by", "nine in ten by", "noticed within " + slotsText(every, r.Delays[0].Horizon)}}
	add := func(name string, list []planning.Delay) {
		for i := range list {
			d := &list[i]
			rows = append(rows, []string{
				onlyFirst(i, name), short(d.Ratio), quantileText(every, d.Half), quantileText(every, d.Most),
				fmt.Sprintf("%s %% (%s to %s)", short(100*float64(d.Found)/float64(d.Draws)), short(100*d.ShareLower), short(100*d.ShareUpper)),
			})
		}
	}
	for i := range r.Parts {
		if r.Parts[i].Critical != nil {
			add(partName(&r.Parts[i]), r.Parts[i].Delays)
		}
	}
	if len(r.Parts) > 1 {
		add("any", r.Delays)
	}
	p.table(rows)
	text := fmt.Sprintf("From %s simulated courses each, seed %d; in brackets exact 95 %% bounds of what more courses could have said. ", thousands(r.Delays[0].Draws), p.seed)
	if g.in.SlotLooks && g.in.Settle > 0 {
		text += fmt.Sprintf("Data settle for another %s before a look. ", config.FormatDuration(g.in.Settle))
	}
	p.wrap(text + "- means later than that.")
}

func quantileText(every config.Every, q planning.Quantile) string {
	if q.Slots == nil {
		return "-"
	}
	low, high := "?", "later"
	if q.Lower != nil {
		low = slotsText(every, *q.Lower)
	}
	if q.Upper != nil {
		high = slotsText(every, *q.Upper)
	}
	return fmt.Sprintf("%s (%s to %s)", slotsText(every, *q.Slots), low, high)
}

func slotsText(every config.Every, slots int) string {
	n := every.N * slots
	switch {
	case every.Unit == config.Minute && n%60 == 0:
		return fmt.Sprintf("%dh", n/60)
	case every.Unit == config.Minute && n > 60:
		return fmt.Sprintf("%dh%dm", n/60, n%60)
	}
	return config.Every{N: n, Unit: every.Unit}.String()
}

// steps is the table of neighbouring critical counts.
func (p *limitsPage) steps(_ *limitsGroup, r *planning.Report) {
	rows := [][]string{{"window", "signals at", "attained size", "false alerts a year", "80 % chance to find"}}
	for i := range r.Parts {
		x := &r.Parts[i]
		for _, s := range []*planning.Step{x.Fewer, x.More} {
			if s == nil {
				continue
			}
			other := planning.Part{Tail: x.Tail, Critical: &s.Critical}
			rows = append(rows, []string{partName(x), signalsAt(&other), short(s.Size), short(s.PerYear), ratioText(s.Ratio)})
		}
	}
	if len(rows) == 1 {
		return
	}
	p.line("\nONE STEP OF THE CRITICAL COUNT")
	p.table(rows)
}

// others lists the series beside the one that is shown in full.
func (p *limitsPage) others(g *limitsGroup) {
	const most = 40
	if len(g.reports) > 1 {
		head := []string{"series", g.in.Unit + " a slot"}
		if g.byBaseline {
			p.line("\nEACH BASELINE")
			head[0] = "of series"
		} else {
			p.line("\nEACH SERIES")
		}
		for i := range g.full().Parts {
			head = append(head, partName(&g.full().Parts[i]))
		}
		rows := [][]string{append(head, "false alerts a year", "once in")}
		for i, r := range g.reports {
			if i == most {
				break
			}
			row := []string{seriesWords(r.Series), short(r.Exposure)}
			for j := range r.Parts {
				row = append(row, signalsAt(&r.Parts[j]))
			}
			rows = append(rows, append(row, short(r.PerYear), onceIn(r.PerYear)))
		}
		p.table(rows)
		if n := len(g.reports); n > most {
			p.line("  ... and %d more: --json has them all", n-most)
		}
	}
	if n := len(g.withheld); n > 0 {
		p.wrap(fmt.Sprintf("No look would be made of %s, whose baselines hold too few events: %s.", plural(n, "series", "series"), strings.Join(g.withheld[:min(n, 10)], ", ")))
	}
}

func plural(n int, one, many string) string {
	if n == 1 {
		return "1 " + one
	}
	return fmt.Sprintf("%d %s", n, many)
}

// seriesWords is a series, or the pattern of several, in words.
func seriesWords(pattern string) string {
	if pattern == "**" {
		return "any series"
	}
	return pattern
}
