package main

import (
	"strings"
	"time"

	"tailbell/monitor/replay/compare"
)

// spans lists the excesses that one or more found.
func (p *printer) spans(c *compare.Comparison) {
	if len(c.Spans) == 0 {
		p.f("\nNo set-up found anything.\n")
		return
	}
	p.f("\nSpans, each from the first window that rang to the last alert's end:\n\n  from\tto\tseries\t")
	p.heads(c)
	for i := range c.Spans {
		s := &c.Spans[i]
		p.f("  %s\t%s\t%s, %s", date(s.From), date(s.To), s.Series, moreOrFewer(string(s.Direction)))
		p.found(s.Found)
	}
}

// episodes lists the known ones.
func (p *printer) episodes(c *compare.Comparison) {
	if c.Episodes == nil {
		return
	}
	p.f("\nKnown episodes, and how many days after their beginning each rang:\n\n  from\tto\tseries\t")
	p.heads(c)
	for i := range c.Episodes {
		e := &c.Episodes[i]
		p.f("  %s\t%s\t%s, %s", date(e.From), date(e.To), e.Series, moreOrFewer(string(e.Direction)))
		p.found(e.Found)
	}
}

func (p *printer) heads(c *compare.Comparison) {
	var names []string
	for i := range c.Sides {
		names = append(names, c.Sides[i].Name)
	}
	p.f("%s\n", strings.Join(names, "\t"))
}

func (p *printer) found(list []*compare.Found) {
	for _, f := range list {
		if f == nil {
			p.f("\tnot found")
			continue
		}
		p.f("\t%s", date(f.Opened))
		if f.Days != nil {
			p.f(" (%s days)", grouped(*f.Days))
		}
		if f.Late {
			p.f(", late,")
		}
		p.f(" by %s", f.Window)
	}
	p.f("\n")
}

// dates says in which zone dates are, and what late means where it was said.
func (p *printer) dates(c *compare.Comparison, zones []string) {
	if len(zones) == 1 {
		p.f("\nDates are in the zone %s.\n", zones[0])
	} else {
		p.f("\nDates are in the zone of each indicator (%s), those of known episodes in the zone of their file.\n", strings.Join(zones, ", "))
	}
	for i := range c.Sides {
		if c.Sides[i].Total.Late > 0 {
			p.f("An alert is late if data that came after its look was due opened it: its date is that of the opening.\n")
			return
		}
	}
}

// date is the date of a moment, with the time of day unless that is midnight.
func date(t time.Time) string {
	if t.Equal(time.Date(t.Year(), t.Month(), t.Day(), 0, 0, 0, 0, t.Location())) {
		return t.Format(time.DateOnly)
	}
	return t.Format("2006-01-02 15:04")
}

func moreOrFewer(direction string) string {
	if direction == "lower" {
		return "fewer"
	}
	return "more"
}
