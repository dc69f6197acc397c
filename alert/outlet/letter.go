package outlet

import (
	_ "embed" // the form of a message
	"fmt"
	"html/template"
	"net/url"
	"strings"

	"tailbell/alert/words"
	"tailbell/config"
	"tailbell/monitor/life"
)

// letterWidth is how wide lines of plain text are.
const letterWidth = 76

//go:embed letter.html
var letterForm string

var letterTemplate = template.Must(template.New("letter").Parse(letterForm))

// letter is what a message says.
type letter struct {
	notices            []*life.Notice
	picture            []byte
	form               config.Picture
	page               string
	outlet, deployment string
}

// link is the alert's place on the page, "" without one.
func (l *letter) link(alert string) string {
	if l.page == "" || alert == "" {
		return ""
	}
	return l.page + "/alerts/" + url.PathEscape(alert)
}

// text is the message for readers of plain text.
func (l *letter) text() string {
	var b strings.Builder
	n := l.notices[0]
	if len(l.notices) > 1 {
		b.WriteString(words.Together(l.notices, letterWidth))
		if l.page != "" {
			b.WriteString("To look at them and to acknowledge:\n" + l.page + "/\n\n")
		}
	} else {
		b.WriteString(words.Notice(n, letterWidth))
		if recompute := recomputeOf(n); recompute != "" {
			b.WriteString("The same numbers again:\n" + recompute + "\n\n")
		}
		if link := l.link(n.Record.ID); link != "" {
			b.WriteString("To look at it, to acknowledge it, to write a note:\n" + link + "\n\n")
		}
		if !cautioned(n) {
			b.WriteString(words.CautionOf(&n.Record) + "\n\n")
		}
	}
	b.WriteString("-- \n" + l.foot() + "\n")
	return b.String()
}

// foot says where a message comes from.
func (l *letter) foot() string {
	n := l.notices[0]
	if len(l.notices) > 1 {
		return fmt.Sprintf("Tailbell, %s, outlet %s, steps %s to %s", l.deployment, l.outlet, n.Key, l.notices[len(l.notices)-1].Key)
	}
	return fmt.Sprintf("Tailbell, %s, outlet %s, step %s", l.deployment, l.outlet, n.Key)
}

// cautioned reports whether the sentences of a step end in the caution.
func cautioned(n *life.Notice) bool {
	p := words.Paragraphs(n)
	return len(p) > 0 && p[len(p)-1] == words.CautionOf(&n.Record)
}

// recomputeOf is the command line that gives the numbers again, where a step
// tells numbers.
func recomputeOf(n *life.Notice) string {
	switch n.Step.Kind {
	case life.StepOpened, life.StepWorsened, life.StepCorrected:
		if n.Step.Evidence != nil {
			return n.Step.Evidence.Recompute
		}
		return n.Record.Worst.Recompute
	case life.StepReminder, life.StepUnshelved:
		return n.Record.Worst.Recompute
	case life.StepAcknowledged, life.StepShelved, life.StepReturned, life.StepWithdrawn, life.StepClosed, life.StepNote, life.StepMarked, life.StepTest:
	}
	return ""
}

// sheet is what the form of a message shows.
type sheet struct {
	What, Direction, Subject, Moment string
	Amount                           string // of alerts told together, and of what
	Upper, Test                      bool
	Paragraphs                       []string
	Facts                            []words.Fact
	Columns                          []string
	Rows                             []sheetRow
	Picture, PictureText             string
	Link, Recompute, Caution, Foot   string
}

type sheetRow struct {
	Link  string
	Cells []string
}

// html is the message as HTML. Everything in it is text but the form itself.
func (l *letter) html() (string, error) {
	n := l.notices[0]
	r := &n.Record
	s := sheet{
		What: words.What(n), Direction: words.Direction(r.Direction), Moment: words.When(n),
		Upper: r.Direction == life.Upper, Test: n.Step.Kind == life.StepTest,
		Caution: words.CautionOf(r), Foot: l.foot(),
	}
	if len(l.notices) > 1 {
		s.Subject, s.Columns, s.Amount = words.SubjectTogether(l.notices), words.Columns, words.AmountTogether(l.notices)
		s.Paragraphs = []string{words.Meaning(l.notices)}
		for _, row := range words.Rows(l.notices) {
			s.Rows = append(s.Rows, sheetRow{l.link(row.ID), row.Cells})
		}
		if l.page != "" {
			s.Link = l.page + "/"
		}
	} else {
		s.Subject, s.Paragraphs, s.Facts = words.Subject(n), words.Paragraphs(n), words.Facts(n)
		if cautioned(n) {
			s.Paragraphs = s.Paragraphs[:len(s.Paragraphs)-1]
		}
		s.Link, s.Recompute = l.link(r.ID), recomputeOf(n)
		if s.Test {
			s.Link = ""
		}
	}
	if l.picture != nil && l.form == config.PNG {
		s.Picture, s.PictureText = pictureName, PictureText(r)
	}
	var b strings.Builder
	if err := letterTemplate.Execute(&b, &s); err != nil {
		return "", fmt.Errorf("filling in the form of a message: %w", err)
	}
	return b.String(), nil
}
