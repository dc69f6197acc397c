package page

import (
	"context"
	"html/template"
	"net/http"
	"slices"

	"tailbell/alert/words"
	"tailbell/monitor"
	"tailbell/monitor/life"
)

// entry is an alert on a list.
type entry struct {
	*life.Record
	Sentence string
	Latest   string // the last step in a few words
	Trend    template.HTML
}

// section is a run of alerts of one condition.
type section struct {
	Title, Text string
	Entries     []entry
}

// nowData is what needs attention now.
type nowData struct {
	Sections []section
	Total    int
	More     bool
	// Blind are conditions under which looks are not made, Silent those of
	// feeds that say nothing.
	Blind, Silent int
	Series        int
	Troubles      []Trouble
	// Unalerted are series that signal without an alert, OfUnalerted how many
	// there are.
	Unalerted   []unalerted
	OfUnalerted int
}

// now shows what needs attention now.
func (p *Page) now(r *http.Request) (*screen, error) {
	records, more, err := p.standing(r.Context())
	if err != nil {
		return nil, err
	}
	d := &nowData{Total: len(records), More: more}
	kinds := []section{
		{Title: "Nobody has acknowledged these", Text: "They signal."},
		{Title: "Returned, but never acknowledged", Text: "No window signals any more. That is no proof that the cause is gone."},
		{Title: "Acknowledged, and still signalling"},
		{Title: "Shelved", Text: "Kept quiet for a while, and watched meanwhile."},
	}
	const most = 40 // each with a picture
	away := false   // an engine does not answer
	for i := range records {
		s := &kinds[min(urgency(records[i].Condition), 3)]
		e := entry{Record: &records[i], Sentence: words.Sentence(&records[i], &records[i].Worst), Latest: latestStep(&records[i])}
		if i < most && !away {
			e.Trend, err = p.trend(r.Context(), records[i].Series, records[i].Opening.Window)
			away = err != nil
		}
		s.Entries = append(s.Entries, e)
	}
	for _, s := range kinds {
		if len(s.Entries) > 0 {
			d.Sections = append(d.Sections, s)
		}
	}
	if !away {
		away = d.addUnseen(r.Context(), p) != nil
	}
	state, err := p.state(r.Context())
	if err != nil {
		return nil, err
	}
	d.Troubles = state.Troubles
	if away {
		d.Troubles = append(slices.Clip(d.Troubles), Trouble{
			Kind: "no answer", Text: "the engine is too busy, or held up, to say more than what is stored: the alerts below are complete, their pictures are not",
		})
	}
	return &screen{name: "now", Title: "What needs attention now", Here: "/", Data: d}, nil
}

// addUnseen counts what could not be looked at.
func (d *nowData) addUnseen(ctx context.Context, p *Page) error {
	g, err := p.glances(ctx)
	if err != nil {
		return err
	}
	d.Series = len(g.rows)
	d.Unalerted, d.OfUnalerted = g.unalerted, g.ofUnalerted
	for kind, n := range g.counts {
		if kind == monitor.Silent {
			d.Silent += n
		} else {
			d.Blind += n
		}
	}
	return nil
}

// latestStep is what last happened to an alert, but for its opening.
func latestStep(r *life.Record) string {
	if len(r.Steps) < 2 {
		return ""
	}
	s := &r.Steps[len(r.Steps)-1]
	text := string(s.Kind)
	if s.Kind == life.StepMarked && s.Mark != life.NotMarked {
		text = "marked " + string(s.Mark)
	}
	if s.By != "" {
		text += " by " + s.By
	}
	return text + ", " + words.Day(s.At.In(words.Zone(r)))
}
