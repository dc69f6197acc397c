package words

import (
	"strings"
	"unicode/utf8"

	"tailbell/monitor/life"
)

// Columns name the parts of a Row.
var Columns = []string{"where", "counted", "usual", "p", "window", "alert"}

// Row is one alert of several that are told together.
type Row struct {
	ID    string
	Cells []string // by Columns
}

// Rows are several steps of one kind and indicator, the strongest first where
// it stands first in the list: the order is kept.
func Rows(notices []*life.Notice) []Row {
	rows := make([]Row, len(notices))
	for i, n := range notices {
		r := &n.Record
		e := toldOf(n)
		rows[i] = Row{ID: r.ID, Cells: []string{
			place(r), counted(e) + " in " + exposure(e) + provisional(e), expected(e), pvalue(log10p(e)), span(e, zoneOf(r)), clean(r.ID),
		}}
	}
	return rows
}

// HeadingTogether is one line over several steps of one kind and indicator.
func HeadingTogether(notices []*life.Notice) string {
	n := notices[0]
	return When(n) + "  " + what(n) + "  " + arrow(n.Record.Direction) + "  " + AmountTogether(notices)
}

// Meaning says what the numbers in a table of several alerts are, and what
// their number means.
func Meaning(notices []*life.Notice) string {
	text := "Each row is an alert of its own, with its own history. p is the chance of so much, or so little, in that one window " +
		"while what is usual holds"
	if notices[0].Step.Kind == life.StepReturned || notices[0].Step.Kind == life.StepWithdrawn {
		return text + "; the counts are those at its strongest."
	}
	return text + ". Many at once may have one cause, a change in how things are counted among them, or none."
}

// Together returns several steps of one kind and indicator as a heading, a
// table and the caution, in lines of the given width where the table allows.
func Together(notices []*life.Notice, width int) string {
	var b strings.Builder
	b.WriteString(HeadingTogether(notices) + "\n")
	lines := [][]string{Columns}
	for _, r := range Rows(notices) {
		lines = append(lines, r.Cells)
	}
	widths := make([]int, len(Columns))
	for _, cells := range lines {
		for i, c := range cells {
			widths[i] = max(widths[i], utf8.RuneCountInString(c))
		}
	}
	for _, cells := range lines {
		line := "   "
		for i, c := range cells {
			line += " " + c + strings.Repeat(" ", widths[i]-utf8.RuneCountInString(c)+1)
		}
		b.WriteString(strings.TrimRight(line, " ") + "\n")
	}
	b.WriteString(wrap(Meaning(notices), width, "    ", "    "))
	b.WriteString(wrap(caution(&notices[0].Record), width, "    ", "    "))
	b.WriteByte('\n')
	return b.String()
}
