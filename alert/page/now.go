package page

import (
	"html/template"
	"net/http"

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
}

// now shows what needs attention now.
func (p *Page) now(r *http.Request) (*screen, error) {
	records, more, err := p.standing()
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
	for i := range records {
		s := &kinds[min(urgency(records[i].Condition), 3)]
		e := entry{Record: &records[i], Sentence: words.Sentence(&records[i], &records[i].Worst), Latest: latestStep(&records[i])}
		if i < most {
			if e.Trend, err = p.trend(r.Context(), records[i].Series, records[i].Opening.Window); err != nil {
				return nil, err
			}
		}
		s.Entries = append(s.Entries, e)
	}
	for _, s := range kinds {
		if len(s.Entries) > 0 {
			d.Sections = append(d.Sections, s)
		}
	}
	g, err := p.glances(r.Context())
	if err != nil {
		return nil, err
	}
	d.Series = len(g.rows)
	for kind, n := range g.counts {
		if kind == monitor.Silent {
			d.Silent += n
		} else {
			d.Blind += n
		}
	}
	state, err := p.state(r.Context())
	if err != nil {
		return nil, err
	}
	d.Troubles = state.Troubles
	return &screen{name: "now", Title: "What needs attention now", Here: "/", Data: d}, nil
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
