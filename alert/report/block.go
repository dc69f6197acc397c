package report

import (
	"fmt"
	"math"
	"slices"
	"strconv"
	"strings"
	"time"

	"tailbell/alert/figure"
	"tailbell/alert/words"
	"tailbell/monitor"
	"tailbell/monitor/estimate"
	"tailbell/monitor/life"
)

// block is a paragraph, a list, or a table: what HTML and Markdown both write.
type block struct {
	Text  string
	List  []string
	Table *table
}

// table is rows under a head; columns from Numbers on are numbers.
type table struct {
	Caption string
	Head    []string
	Rows    [][]string
	Numbers []int
}

// Number reports whether a column holds numbers.
func (t *table) Number(column int) bool { return slices.Contains(t.Numbers, column) }

const day = "2 January 2006"

// headOf says in one line what the report is of.
func headOf(r *Report) string {
	parts := []string{"Set-up " + r.Setup.Name}
	if !r.From.IsZero() {
		parts = append(parts, "looks from "+r.From.Format(day)+" to "+r.To.Format(day))
	}
	if !r.Made.IsZero() {
		parts = append(parts, "made on "+r.Made.Format(day))
	}
	return strings.Join(parts, "; ") + "."
}

// looksWords says what the table counts as looks, and how many were made when
// they fell due.
func looksWords(r *Report) string {
	text := "Looks are counted as the data stand in the end, with all that came late."
	if a := r.Account; a.Looks+a.WithheldLooks > 0 {
		text += " When they fell due, " + made(a) + ", all indicators together."
	}
	return text
}

func made(a monitor.Account) string {
	return fmt.Sprintf("%s made and %s withheld because a count or an exposure was missing", wereAmount(a.Looks, "looks"), words.Whole(a.WithheldLooks))
}

// wereAmount is an amount with its verb: "1 row was", "2 rows were".
func wereAmount(n int64, nouns string) string {
	verb := " were"
	if n == 1 {
		verb = " was"
	}
	return words.Amount(n, nouns) + verb
}

// short is the table at the beginning.
func short(r *Report) *table {
	t := &table{
		Caption: looksWords(r),
		Head:    []string{"indicator", "series", "looks possible in the end", "not possible", "alerts: more", "fewer", "marked real", "chance", "data error", "redefined", "not marked", "withdrawn"},
		Numbers: []int{1, 2, 3, 4, 5, 6, 7, 8, 9, 10, 11},
	}
	n := func(v int) string { return words.Whole(int64(v)) }
	for _, in := range r.Indicators {
		c := in.Counts()
		t.Rows = append(t.Rows, []string{
			in.Cfg.Title, n(len(in.Series)), words.Whole(in.Looks), words.Whole(in.Withheld), n(c.Upper), n(c.Lower),
			n(c.Real), n(c.Chance), n(c.Data), n(c.Redefined), n(c.Unmarked), n(c.Withdrawn),
		})
	}
	return t
}

func per(in *Indicator) string {
	if in.Cfg.Per == 1 {
		return "per unit of " + in.Cfg.Unit
	}
	return "per " + multiple(in.Cfg.Per) + " " + in.Cfg.Unit
}

// multiple writes a multiple of a unit, or a level, in full: "1,000", "365.25".
func multiple(x float64) string {
	return words.Grouped(strconv.FormatFloat(math.Round(x*1e9)/1e9, 'f', -1, 64))
}

func percent(alpha float64) string { return multiple(100*(1-alpha)) + " %" }

func baselines(in *Indicator) *table {
	t := &table{Head: []string{"for series", "baseline", per(in), "bounds (" + percent(in.Cfg.Alpha) + ", exact)", "valid", "source"}, Numbers: []int{2, 3}}
	for _, b := range in.Baselines {
		valid := b.From
		if valid == "" {
			valid = "always"
		}
		t.Rows = append(t.Rows, []string{seriesWords(b.Series), b.Kind, b.Rate, b.Bounds, valid, b.Source})
	}
	return t
}

func seriesWords(pattern string) string {
	if pattern == "" || pattern == "**" {
		return "all"
	}
	return pattern
}

func pair(lower, upper float64) string {
	a, b := words.Pair(lower, upper)
	return a + " to " + b
}

// estimateOf defends the usual rate, or says what speaks against it.
func estimateOf(in *Indicator) []block {
	e := in.Estimate
	s := e.Stability
	text := fmt.Sprintf("%s in %s %s, all series together: %s %s, exact bounds %s (%s).", words.Amount(e.Pooled.Events, in.Cfg.EventNoun),
		words.Grouped(e.Pooled.Exposure), e.Unit, words.Number(e.Pooled.Rate), per(in), pair(e.Pooled.Lower, e.Pooled.Upper), percent(1-e.Level))
	if s.JackknifeError > 0 {
		text += fmt.Sprintf(" Its standard error is %s if only chance varies, and %s by the jackknife over %d periods of %s.",
			words.Number(s.ChanceError*in.Cfg.Per), words.Number(s.JackknifeError*in.Cfg.Per), len(s.Periods), words.Length(s.Length))
	}
	if b := s.Bootstrap; b != nil {
		text += fmt.Sprintf(" Redrawn %s times in blocks of %d periods, the middle %s of its values are %s.", words.Whole(int64(b.Draws)), b.Block,
			percent(1-e.Level), pair(b.Percentile[0]*in.Cfg.Per, b.Percentile[1]*in.Cfg.Per))
	}
	text += " This is the whole history, excesses included."
	blocks := []block{{Text: text}, {Table: spreadTable(e)}}
	if e.Between != nil {
		blocks = append(blocks, block{Text: "Do the series differ by more than chance? p = " + pText(e.Between) + "."})
	}
	if t := periods(in, e); t != nil {
		blocks = append(blocks, block{Table: t})
	}
	return append(blocks, block{Text: "What follows for a baseline:"}, block{List: e.Advice})
}

func pText(p *estimate.PValue) string {
	if p.Exact {
		return words.PValue(math.Log10(p.P)) + " (exact)"
	}
	return fmt.Sprintf("%s (%s by %s draws)", words.PValue(math.Log10(p.P)), pair(p.Lower, p.Upper), words.Whole(p.Chance.Draws))
}

func spreadTable(e *estimate.Report) *table {
	t := &table{
		Caption: "Variance of the counts over what chance gives (1 if only chance varies)",
		Head:    []string{"around", "over", "counts", "spread", "at most", "p"}, Numbers: []int{2, 3, 4},
	}
	add := func(name string, s *estimate.Spread) {
		most := "-"
		switch {
		case s.Unbounded:
			most = "no bound"
		case s.Bound > 0:
			most = words.Number(s.Bound)
		}
		t.Rows = append(t.Rows, []string{name, words.Length(s.Length), words.Whole(int64(s.Counts)), words.Number(s.Phi), most, pText(&s.Chance)})
	}
	if len(e.Series) > 1 {
		add("one rate for all", &e.Total)
	}
	for i := range e.Within {
		add("each series' own rate", &e.Within[i])
	}
	for i := range e.Summed {
		add("one rate, all series summed", &e.Summed[i])
	}
	return t
}

// periods are those that stand out.
func periods(in *Indicator, e *estimate.Report) *table {
	t := &table{
		Caption: "Periods of " + words.Length(e.Stability.Length) + " that stand out from the rate of the whole history",
		Head:    []string{"from", in.Cfg.EventNoun, "expected", "p", "changes the rate by"}, Numbers: []int{1, 2, 4},
	}
	for _, p := range e.Stability.Periods {
		if p.Marked {
			t.Rows = append(t.Rows, []string{
				p.Start.Time().In(in.Cfg.Zone).Format(day), words.Whole(p.Events), words.Number(p.Expected),
				words.PValue(math.Log10(p.P)), fmt.Sprintf("%+.1f %%", 100*p.Influence),
			})
		}
	}
	if len(t.Rows) == 0 {
		return nil
	}
	return t
}

const funnelWords = "A series with little exposure strays further by chance, so each is held against limits that follow its exposure " +
	"(Spiegelhalter 2005, Statistics in Medicine 24, 1185-1202), here by exact Poisson or binomial tails around the rate of all series together, " +
	"which is taken as known and holds the series itself. Of many series some lie outside by chance: about 1 in 20 past the 95 % limits, 1 in 500 past the others. " +
	"Series differ in whom they look after; a place outside the limits says nothing of its cause."

func funnelTable(f *figure.Funnel) *table {
	t := &table{Head: []string{"series", f.Events, f.Exposure, f.Rate, "bounds (95 %, exact)", "p (two-sided)", "limits"}, Numbers: []int{1, 2, 3, 4}}
	for _, r := range f.Rows() {
		where := "within"
		if r.Outside > 0 {
			side := "below"
			if r.High {
				side = "above"
			}
			where = side + map[int]string{1: " 95 %", 2: " 99.8 %"}[r.Outside]
		}
		if r.Exposure <= 0 {
			t.Rows = append(t.Rows, []string{r.Name, words.Whole(r.Events), "0", "-", "-", "-", "no exposure"})
			continue
		}
		t.Rows = append(t.Rows, []string{
			r.Name, words.Whole(r.Events), words.Number(r.Exposure), words.Number(r.Rate), pair(r.Lower, r.Upper), words.PValue(math.Log10(r.P)), where,
		})
	}
	return t
}

func seriesTable(in *Indicator) *table {
	t := &table{
		Head: []string{"series", in.Cfg.EventNoun, in.Cfg.Unit, per(in), "bounds (" + percent(in.Cfg.Alpha) + ", exact)", "slots missing", "alerts"}, Numbers: []int{1, 2, 3, 4, 5, 6},
	}
	for _, s := range in.Series {
		rate, bounds := "-", "-"
		if !math.IsNaN(s.Rate) {
			rate, bounds = words.Number(s.Rate), pair(s.Lower, s.Upper)
		}
		t.Rows = append(t.Rows, []string{s.Name, words.Whole(s.Events), s.Exposure, rate, bounds, words.Whole(int64(s.Missing)), words.Whole(int64(s.Alerts))})
	}
	return t
}

func leftOut(in *Indicator) string {
	if in.LeftOut == 0 {
		return ""
	}
	return fmt.Sprintf("Pictures of %s without, or with fewest, alerts are left out; the table has them all.", words.Amount(int64(in.LeftOut), "series"))
}

// notice is the step that opened an alert, with the record as it stands.
func notice(a *life.Record) *life.Notice {
	step := life.Step{Kind: life.StepOpened, At: a.Opened, Condition: a.Condition, Evidence: &a.Opening}
	if len(a.Steps) > 0 {
		step = a.Steps[0]
	}
	return &life.Notice{Step: step, Record: *a}
}

func heading(a life.Record) string {
	sign := "▲ more than usual"
	if a.Direction == life.Lower {
		sign = "▼ fewer than usual"
	}
	text := "Alert " + a.ID + ": " + sign + ", opened " + words.Opened(&a)
	if a.Late {
		text += " by data that came after its look was due (" + a.Opened.In(words.Zone(&a)).Format("2006-01-02 15:04 MST") + ")"
	}
	text += "; " + string(a.Condition)
	if a.Mark != life.NotMarked {
		text += ", marked " + string(a.Mark)
	}
	return text
}

// glance is all alerts of an indicator, a row each.
func glance(in *Indicator) *table {
	t := &table{
		Head:    []string{"alert", "series", "direction", "opened", "window", in.Cfg.EventNoun, "usual", "p", "stands", "marked"},
		Numbers: []int{3, 5, 6, 7},
	}
	for i := range in.Alerts {
		a := &in.Alerts[i]
		sign := "▲\u00a0more"
		if a.Direction == life.Lower {
			sign = "▼\u00a0fewer"
		}
		opened := a.OpenedAt().In(in.Cfg.Zone).Format("2006-01-02")
		if a.Late {
			opened += ", late"
		}
		e := openedBy(&a.Record)
		t.Rows = append(t.Rows, []string{
			a.ID, a.Series, sign, opened, words.Length(e.Window), words.Whole(e.Events),
			words.Expected(e), words.PValue(e.Log10P), string(a.Condition), string(a.Mark),
		})
	}
	return t
}

// openedBy is the evidence as it was when the alert opened. The record's own is
// that as corrected since.
func openedBy(a *life.Record) *life.Evidence {
	if len(a.Steps) > 0 && a.Steps[0].Evidence != nil {
		return a.Steps[0].Evidence
	}
	return &a.Opening
}

// commands are what gives the numbers of an alert again: of its sentence, and
// where the data changed since, of the evidence as it stands now.
func commands(a life.Record) []command {
	e := openedBy(&a)
	if e.Recompute == "" { // silence has no numbers
		return nil
	}
	list := []command{{"Its numbers again:", e.Recompute}}
	if a.Opening.Recompute != "" && a.Opening.Recompute != e.Recompute {
		list = append(list, command{"The same as the data were corrected since:", a.Opening.Recompute})
	}
	return list
}

// command is a line for a shell, with what it is for.
type command struct{ Text, Line string }

// paragraphs are the sentences of an alert without the caution, which stands
// at both ends of the report.
func paragraphs(a life.Record) []string {
	var list []string
	for _, p := range words.Paragraphs(notice(&a)) {
		if p != a.Caution && p != words.Caution {
			list = append(list, p)
		}
	}
	if len(commands(a)) > 1 {
		list = append(list, "As the data were corrected since: "+words.Sentence(&a, &a.Opening))
	}
	return list
}

// steps are what happened to an alert, one line each.
func steps(a life.Record) []string {
	zone := a.Opening.Due.Location()
	var list []string
	for _, s := range a.Steps {
		text := s.At.In(zone).Format("2 January 2006 15:04") + ": " + string(s.Kind)
		if s.Mark != life.NotMarked {
			text += " " + string(s.Mark)
		}
		if s.By != "" {
			text += " by " + s.By
		}
		if s.Why != "" {
			text += ": " + s.Why
		}
		if e := s.Evidence; e != nil {
			text += fmt.Sprintf(" (%s in the %s to %s, %s)", words.Amount(e.Events, e.EventNoun), words.Length(e.Window),
				e.To.Add(-time.Second).Format(day), "p = "+words.PValue(e.Log10P))
		}
		list = append(list, text)
	}
	return list
}

// lacks says what kept looks from being made.
func lacks(r *Report) []block {
	a := r.Account
	text := fmt.Sprintf("%s read, of which %s could not be used. %s refused by the engine, %s belonged to no indicator, %s came late, %s replaced an earlier one.",
		wereAmount(int64(r.Rows), "rows"), words.Whole(int64(r.Faults)), wereAmount(a.Refused, "observations"), words.Whole(a.Unmonitored),
		words.Whole(a.Late), words.Whole(a.Replaced))
	text += fmt.Sprintf(" When they fell due, %s; %s made again because data changed.", made(a), wereAmount(a.Reruns, "looks"))
	if r.Begins != "" {
		text += " " + r.Begins + " What was let go is in none of these figures and pictures; alerts are whole."
	}
	blocks := append([]block{{Text: text}}, unused(r)...)
	if len(r.Conditions) == 0 {
		return append(blocks, block{Text: "No series lacks anything at the end."})
	}
	t := &table{Caption: "What stood in the way at the end", Head: []string{"series", "since", "what"}}
	const most = 60
	for i, c := range r.Conditions {
		if i == most {
			blocks = append(blocks, block{Text: fmt.Sprintf("%s more.", words.Whole(int64(len(r.Conditions)-most)))})
			break
		}
		t.Rows = append(t.Rows, []string{c.Series, c.Since, c.Text})
	}
	return append(blocks, block{Table: t})
}

// unused names the rows of which nothing was counted.
func unused(r *Report) []block {
	if len(r.Unused) == 0 {
		return nil
	}
	t := &table{Caption: "Rows that were refused or could not be used, and are not counted", Head: []string{"row", "reason", "what"}}
	const most = 60
	for i, u := range r.Unused {
		if i == most {
			break
		}
		t.Rows = append(t.Rows, []string{u.Place, u.Reason, u.Detail})
	}
	blocks := []block{{Table: t}}
	if n := len(r.Unused) - most; n > 0 {
		blocks = append(blocks, block{Text: words.Amount(int64(n), "rows") + " more; the command names them all."})
	}
	return blocks
}

// again says from what the report was made.
func again(r *Report) []block {
	list := []string{
		"Program: tailbell " + r.Program,
		"Set-up: SHA-256 " + r.Setup.Digest + ", its text below",
		"Data: SHA-256 " + r.Data + " over the rows in canonical form and the times at which they became known, from " + strings.Join(r.Files, ", "),
	}
	for _, p := range r.Rehearsals {
		if p.Data != "" && p.Data != r.Data {
			list = append(list, "A rehearsal used other data: SHA-256 "+p.Data)
		}
	}
	if r.Begins != "" {
		list = append(list, r.Begins)
	}
	blocks := []block{{Text: "The same data, set-up, options and program give this file again to the byte."}, {List: list}}
	if r.Remake != "" {
		blocks = append(blocks, block{Text: "The command: " + r.Remake})
	}
	return blocks
}
