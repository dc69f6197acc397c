package main

import (
	"bytes"
	"cmp"
	"errors"
	"fmt"
	"io"
	"math"
	"slices"
	"strconv"
	"strings"
	"text/tabwriter"

	"tailbell/monitor"
	"tailbell/monitor/estimate"
)

// baselinePage prints a report for people.
type baselinePage struct {
	bytes.Buffer
	h     *estimate.History
	r     *estimate.Report
	width int
}

func printBaseline(w io.Writer, h *estimate.History, r *estimate.Report, stanza string) error {
	p := &baselinePage{h: h, r: r, width: widthOf(w)}
	p.head()
	p.spread()
	p.calendar()
	p.influence()
	p.windows()
	p.delay()
	p.series()
	p.line("\nRECOMMENDATION")
	for _, text := range r.Advice {
		p.wrap(text)
	}
	p.line("\nFOR THE SET-UP\n%s", stanza)
	p.wrap("A signal judged by it is a statistical finding: it diagnoses nothing, and silence is no proof of safety.")
	_, err := w.Write(p.Bytes())
	return err
}

func (p *baselinePage) line(format string, args ...any) { fmt.Fprintf(&p.Buffer, format+"\n", args...) }

// wrap prints a paragraph, marked as an item.
func (p *baselinePage) wrap(text string) {
	column := 0
	for i, word := range strings.Fields(text) {
		n := len([]rune(word))
		switch {
		case i == 0:
			p.WriteString("  * ")
			column = 4
		case column+1+n > p.width:
			p.WriteString("\n    ")
			column = 4
		default:
			p.WriteByte(' ')
			column++
		}
		p.WriteString(word)
		column += n
	}
	p.WriteByte('\n')
}

// table prints rows of cells, the first column to the left.
func (p *baselinePage) table(rows [][]string) {
	var cells strings.Builder
	for _, row := range rows {
		cells.WriteString("  " + strings.Join(row, "\t") + "\n")
	}
	t := tabwriter.NewWriter(&p.Buffer, 0, 0, 2, ' ', 0)
	_, err := io.WriteString(t, cells.String())
	if err = errors.Join(err, t.Flush()); err != nil {
		panic(err) // a buffer takes everything
	}
}

func (p *baselinePage) head() {
	in, r := p.h.Indicator, p.r
	slots := 0
	for i := range r.Series {
		slots += r.Series[i].Slots
	}
	p.line("%s (%s): %s to before %s, %d series, %s slots of %s", in.Title, in.Name,
		p.date(p.h.From), p.date(p.h.To), len(r.Series), thousands(int64(slots)), in.Every)
	p.line("data %s, seed %d\n", r.Digest[:16], r.Seed)
	p.line("USUAL RATE")
	p.line("  %s %s in %s %s: %s per %s, %s to %s (%s %%, exact)", thousands(r.Pooled.Events), in.EventNoun, r.Pooled.Exposure, in.Unit,
		short(r.Pooled.Rate), p.h.PerUnit(), short(r.Pooled.Lower), short(r.Pooled.Upper), trim(math.Round(1e6*r.Level)/1e4))
	s := r.Stability
	if s.JackknifeError == 0 {
		return
	}
	p.line("  standard error %s if only chance varies, %s by the jackknife over %d periods of %s",
		short(s.ChanceError*in.Per), short(s.JackknifeError*in.Per), len(s.Periods), s.Length)
	if s.NoBootstrap != "" {
		p.line("  no bootstrap: %s", s.NoBootstrap)
	}
	if b := s.Bootstrap; b != nil {
		text := fmt.Sprintf("  bootstrap in blocks of %d, %s redraws: standard error %s, percentile interval %s to %s", b.Block, thousands(int64(b.Draws)),
			short(b.Error*in.Per), short(b.Percentile[0]*in.Per), short(b.Percentile[1]*in.Per))
		if b.BCa[1] > 0 {
			text += fmt.Sprintf(", BCa %s to %s", short(b.BCa[0]*in.Per), short(b.BCa[1]*in.Per))
		}
		p.line("%s", text)
	}
}

func (p *baselinePage) date(at monitor.Instant) string {
	return at.Time().In(p.h.Indicator.Zone).Format("2006-01-02")
}

func (p *baselinePage) spread() {
	p.line("\nSPREAD: variance over what chance gives (divisor: counts less one for each rate)")
	rows := [][]string{{"around", "over", "counts", "spread", "at most", "p"}}
	add := func(name string, s estimate.Spread) {
		rows = append(rows, []string{name, s.Length, thousands(int64(s.Counts)), short(s.Phi), atMost(s), chanceText(s.Chance)})
	}
	own := "the series' own rate"
	if len(p.r.Series) > 1 {
		add("one rate for all", p.r.Total)
		own = "each series' own rate"
	}
	for i, s := range p.r.Within {
		add(onlyFirst(i, own), s)
	}
	for i, s := range p.r.Summed {
		add(onlyFirst(i, "one rate, all series summed"), s)
	}
	p.table(rows)
	if p.r.Between != nil {
		p.line("  Do the series differ? p = %s", chanceText(*p.r.Between))
	}
}

func onlyFirst(i int, text string) string {
	if i > 0 {
		return ""
	}
	return text
}

func atMost(s estimate.Spread) string {
	switch {
	case s.Unbounded:
		return "no bound"
	case s.Bound == 0:
		return "-"
	}
	return short(s.Bound)
}

func chanceText(p estimate.PValue) string {
	if p.Exact {
		return short(p.P) + " exact"
	}
	return fmt.Sprintf("%s (%s to %s, %s draws)", short(p.P), short(p.Lower), short(p.Upper), thousands(p.Chance.Draws))
}

func (p *baselinePage) calendar() {
	if len(p.r.Effects) == 0 {
		return
	}
	p.line("\nCALENDAR: events over expected")
	for _, e := range p.r.Effects {
		p.line("  by %s, p = %s", e.By, chanceText(e.Chance))
		if len(e.Strata) > 12 {
			continue
		}
		var parts []string
		for _, s := range e.Strata {
			if s.Expected > 0 {
				parts = append(parts, fmt.Sprintf("%s %s", s.Label[:3], short(s.Factor)))
			}
		}
		if len(parts) > 0 {
			p.line("    %s", strings.Join(parts, ", "))
		}
	}
}

func (p *baselinePage) influence() {
	s := p.r.Stability
	if s.JackknifeError == 0 {
		return
	}
	periods := slices.Clone(s.Periods)
	slices.SortStableFunc(periods, func(a, b estimate.Period) int {
		return cmp.Compare(math.Abs(b.Influence), math.Abs(a.Influence))
	})
	p.line("\nPERIODS that the rate hangs on most, of %d of %s", len(periods), s.Length)
	rows := [][]string{{"from", "events", "expected", "p", "changes the rate by", ""}}
	for _, x := range periods[:min(5, len(periods))] {
		rows = append(rows, []string{
			p.date(x.Start), thousands(x.Events), short(x.Expected), short(x.P),
			fmt.Sprintf("%+.1f %%", 100*x.Influence), map[bool]string{true: "<- stands out"}[x.Marked],
		})
	}
	p.table(rows)
	p.excesses()
}

func (p *baselinePage) excesses() {
	if len(p.r.Excesses) == 0 {
		return
	}
	const most = 12
	p.line("\nPERIODS OF SINGLE SERIES that stand out from the series' own rate, %d of them", len(p.r.Excesses))
	rows := [][]string{{"series", "from", "events", "expected", "p", "changes its rate by"}}
	for _, x := range p.r.Excesses[:min(most, len(p.r.Excesses))] {
		rows = append(rows, []string{
			x.Series, p.date(x.Start), thousands(x.Events), short(x.Expected), short(x.P), fmt.Sprintf("%+.1f %%", 100*x.Influence),
		})
	}
	p.table(rows)
}

func (p *baselinePage) windows() {
	for _, w := range p.r.Windows {
		p.line("\n%s", windowsHead(w))
		rows := [][]string{{"events", "seen", "by chance"}}
		if w.Phi > 1 {
			rows[0] = append(rows[0], "with spread "+short(w.Phi))
		}
		for _, s := range w.Shares {
			label := strconv.FormatInt(s.Least, 10)
			switch {
			case s.Most < 0:
				label += " or more"
			case s.Most > s.Least:
				label += " to " + strconv.FormatInt(s.Most, 10)
			}
			row := []string{label, trim(s.Seen), fmt.Sprintf("%.1f", s.Chance)}
			if w.Phi > 1 {
				row = append(row, fmt.Sprintf("%.1f", s.Spread))
			}
			rows = append(rows, row)
		}
		p.table(rows)
	}
}

// windowsHead says how many windows the counts are of.
func windowsHead(w *estimate.Windows) string {
	text := fmt.Sprintf("WINDOWS of %s: %s of them", w.Window, thousands(int64(w.Count)))
	if w.Of > w.Count {
		text += fmt.Sprintf(", evenly thinned from %s", thousands(int64(w.Of)))
	}
	if x := w.AtLimit; x != nil {
		text += fmt.Sprintf("; %s lay at p <= %s where chance gives %s", thousands(int64(x.Past)), short(x.PLimit), short(x.Chance))
	}
	return text
}

func (p *baselinePage) delay() {
	d := p.r.Delay
	if d == nil {
		return
	}
	p.line("\nREPORTING DELAY after the end of a slot, from %s events; given that it is at most %s", thousands(d.Events), d.Shares[len(d.Shares)-1].Age)
	rows := [][]string{{"age", "reported", "naive"}}
	for _, s := range d.Shares {
		rows = append(rows, []string{s.Age, fmt.Sprintf("%.4f", s.Reported), fmt.Sprintf("%.4f", s.Naive)})
	}
	p.table(rows)
}

func (p *baselinePage) series() {
	p.line("\nSERIES, rates per %s", p.h.PerUnit())
	rows := [][]string{{"series", "events", "exposure", "rate", "bounds", "spread", "at most", "p", "apart p", "missing"}}
	const most = 60
	for i, s := range p.r.Series {
		if i == most {
			break
		}
		rows = append(rows, []string{
			s.Name, thousands(s.Events), s.Exposure, rateText(s.Rate), boundsText(s.Rate),
			short(s.Spread.Phi), atMost(s.Spread), short(s.Spread.Chance.P), short(s.Adjusted), strconv.Itoa(s.Missing),
		})
	}
	p.table(rows)
	if n := len(p.r.Series); n > most {
		p.line("  ... and %d more: --json has them all", n-most)
	}
}

func rateText(r estimate.Rate) string {
	if r.Unbounded {
		return "-"
	}
	return short(r.Rate)
}

func boundsText(r estimate.Rate) string {
	if r.Unbounded {
		return "no exposure"
	}
	return short(r.Lower) + " to " + short(r.Upper)
}

// short writes a number with about three figures.
func short(x float64) string {
	switch a := math.Abs(x); {
	case a == 0 || a >= 1e-4 && a < 1e6:
		digits := 3
		if a >= 100 {
			digits = len(strconv.FormatInt(int64(a), 10))
		}
		return strconv.FormatFloat(x, 'g', digits, 64)
	}
	return strconv.FormatFloat(x, 'g', 2, 64)
}

func trim(x float64) string { return strconv.FormatFloat(x, 'f', -1, 64) }

// thousands writes a whole number with commas.
func thousands(n int64) string {
	s := strconv.FormatInt(n, 10)
	for i := len(s) - 3; i > 0 && s[i-1] != '-'; i -= 3 {
		s = s[:i] + "," + s[i:]
	}
	return s
}
