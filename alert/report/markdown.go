package report

import (
	"fmt"
	"io"
	"strings"
	"unicode"
)

// Markdown writes the report as one Markdown file (CommonMark with tables). In
// place of each picture stand the words of its text alternative.
func (r *Report) Markdown(w io.Writer) error {
	m := &markdown{}
	m.title(1, r.Title)
	m.para(headOf(r))
	m.caution()
	m.title(2, "In short")
	m.table(short(r))
	for _, in := range r.Indicators {
		m.indicator(in)
	}
	if len(r.Rehearsals) > 0 {
		m.title(2, "Rehearsals")
		for _, p := range r.Rehearsals {
			m.title(3, rehearsalTitle(p))
			m.blocks(rehearsal(p))
		}
	}
	m.title(2, "What was not looked at")
	m.blocks(lacks(r))
	m.title(2, "How to make this report again")
	m.blocks(again(r))
	for _, line := range strings.Split(strings.TrimRight(string(r.Setup.Text), "\n"), "\n") {
		m.b.WriteString("    " + plainText(line) + "\n")
	}
	m.b.WriteByte('\n')
	m.caution()
	if _, err := io.WriteString(w, m.b.String()); err != nil {
		return fmt.Errorf("write the report as Markdown: %w", err)
	}
	return nil
}

type markdown struct{ b strings.Builder }

func (m *markdown) title(level int, text string) {
	m.b.WriteString(strings.Repeat("#", level) + " " + escape(text) + "\n\n")
}

func (m *markdown) para(text string) { m.b.WriteString(escape(text) + "\n\n") }

func (m *markdown) caution() { m.b.WriteString("> **Cautions.** " + escape(Caution) + "\n\n") }

func (m *markdown) list(items []string) {
	for _, text := range items {
		m.b.WriteString("- " + escape(text) + "\n")
	}
	m.b.WriteByte('\n')
}

func (m *markdown) table(t *table) {
	if t == nil || len(t.Rows) == 0 {
		return
	}
	if t.Caption != "" {
		m.para(t.Caption)
	}
	row := func(cells []string) {
		m.b.WriteByte('|')
		for _, c := range cells {
			m.b.WriteString(" " + escape(c) + " |")
		}
		m.b.WriteByte('\n')
	}
	row(t.Head)
	m.b.WriteByte('|')
	for i := range t.Head {
		if t.Number(i) {
			m.b.WriteString("---:|")
		} else {
			m.b.WriteString("---|")
		}
	}
	m.b.WriteByte('\n')
	for _, r := range t.Rows {
		row(r)
	}
	m.b.WriteByte('\n')
}

func (m *markdown) blocks(list []block) {
	for _, b := range list {
		if b.Text != "" {
			m.para(b.Text)
		}
		if len(b.List) > 0 {
			m.list(b.List)
		}
		m.table(b.Table)
	}
}

func (m *markdown) picture(p *Picture) {
	if p != nil {
		m.para("Picture (" + p.Title + "): " + p.Caption())
	}
}

func (m *markdown) indicator(in *Indicator) {
	m.title(2, in.Cfg.Title)
	m.title(3, "What was monitored, and how")
	m.list(in.How)
	m.title(3, "The usual rate")
	m.table(baselines(in))
	if in.Estimate != nil {
		m.title(3, "What the history itself says of the usual rate")
		m.blocks(estimateOf(in))
	}
	if in.Funnel != nil {
		m.title(3, "All series against the rate of all")
		m.para(funnelWords)
		m.para("Picture: " + in.Funnel.Describe())
		m.table(funnelTable(in.Funnel))
	}
	m.title(3, "Alerts")
	m.table(glance(in))
	if len(in.Alerts) == 0 {
		m.para("None was opened. Silence is no proof of safety.")
	}
	for i := range in.Alerts {
		a := &in.Alerts[i]
		m.title(4, heading(a.Record))
		for _, p := range paragraphs(a.Record) {
			m.para(p)
		}
		m.picture(a.Picture)
		m.list(steps(a.Record))
		for _, c := range commands(a.Record) {
			m.para(c.Text)
			m.b.WriteString("    " + plainText(c.Line) + "\n\n")
		}
	}
	m.title(3, "Each series over its whole history")
	m.table(seriesTable(in))
	if text := leftOut(in); text != "" {
		m.para(text)
	}
	for _, s := range in.Series {
		if len(s.Pictures) == 0 {
			continue
		}
		m.title(4, s.Name)
		for _, f := range s.Pictures {
			m.picture(f)
		}
	}
}

// plainText is a text without control characters, line ends among them.
func plainText(s string) string {
	return strings.Map(func(r rune) rune {
		if unicode.IsControl(r) || r == '\u2028' || r == '\u2029' {
			return ' '
		}
		return r
	}, s)
}

// escape writes a text so that nothing in it is markup, a link or an address.
func escape(s string) string {
	s = plainText(s)
	var b strings.Builder
	for i, r := range s {
		switch {
		case strings.ContainsRune("\\`*_{}[]<>#|~&$@!", r):
			b.WriteByte('\\')
		case r == ':' && strings.HasPrefix(s[i:], "://"), r == '.' && i >= 3 && strings.EqualFold(s[i-3:i], "www"):
			b.WriteByte('\\')
		case strings.ContainsRune("-+=", r) && strings.TrimSpace(s[:i]) == "", (r == '.' || r == ')') && digits(s[:i]) && (i+1 == len(s) || s[i+1] == ' '):
			b.WriteByte('\\')
		}
		b.WriteRune(r)
	}
	return strings.TrimLeft(b.String(), " ")
}

func digits(s string) bool {
	s = strings.TrimSpace(s)
	return s != "" && strings.Trim(s, "0123456789") == ""
}
