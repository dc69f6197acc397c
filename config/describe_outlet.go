package config

import (
	"fmt"
	"slices"
	"strconv"
	"strings"
)

// outlets says who is told of what.
func (p *prose) outlets(list []Outlet) {
	for i := range list {
		o := &list[i]
		p.line("Outlet %s (%s) goes to %s; it is told of %s.", o.Name, o.Kind, o.destination(), o.Told.text())
	}
}

// destination says where the outlet leads; it holds no secret.
func (o *Outlet) destination() string {
	switch o.Kind {
	case Webhook:
		return o.URL
	case Mail:
		return strings.Join(o.Mail.To, ", ") + " by " + o.Mail.Server
	case Command:
		return "the program " + o.Command[0]
	}
	return "nowhere"
}

// text says of which alerts and steps an outlet is told.
func (t *Told) text() string {
	what := "all steps"
	if len(t.Steps) > 0 {
		what = "the steps " + strings.Join(t.Steps, ", ")
	}
	what += " of all alerts"
	if t.Upper != t.Lower {
		tail := "more"
		if t.Lower {
			tail = "fewer"
		}
		what += " of " + tail + " events than usual"
	}
	if len(t.Indicators) > 0 {
		what += " of " + strings.Join(t.Indicators, ", ")
	}
	if len(t.Series) > 0 {
		names := make([]string, len(t.Series))
		for i, q := range t.Series {
			names[i] = q.String()
		}
		what += " on the series " + strings.Join(names, ", ")
	}
	if t.PAtMost > 0 {
		what += " whose p was at most " + strconv.FormatFloat(t.PAtMost, 'g', -1, 64)
	}
	if !t.History {
		what += ", but of none taken in history time"
	}
	return what
}

// outlet finds patterns that no series of any indicator of which the outlet is
// told can match.
func (d *doubts) outlet(s *Setup, o *Outlet, i int) {
	for j, q := range o.Told.Series {
		if !o.Told.meets(s, q) {
			d.add(nil, fmt.Sprintf("outlet[%d].series[%d]", i+1, j+1),
				fmt.Sprintf("%q meets no series of any indicator that the outlet %s is told of: it would tell of none of them", q, o.Name),
				"compare it with the patterns of the indicators")
		}
	}
}

// meets reports whether some series of an indicator can match the pattern.
func (t *Told) meets(s *Setup, q Pattern) bool {
	return slices.ContainsFunc(s.Indicators, func(in Indicator) bool {
		if len(t.Indicators) > 0 && !slices.Contains(t.Indicators, in.Name) {
			return false
		}
		return slices.ContainsFunc(in.Series, func(p Pattern) bool {
			_, both := overlap(p, q)
			return both
		})
	})
}
