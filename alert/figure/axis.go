package figure

import (
	"math"
	"strconv"
	"strings"
	"time"
)

// rulers draws the lines of the paper with their values, and the dates below.
func (c *canvas) rulers(step float64) {
	for v := 0.0; v <= c.most+step/1e6; v += step {
		y := c.y(v)
		opacity := "0.16"
		if v == 0 {
			opacity = "0.7"
		}
		c.rule(c.left, y, c.edge(), y, opacity)
		c.text(c.left-7, y+4, "end", "fig-scale", ink, plain(v))
	}
	marks, layout := dates(c.from, c.to, max(int((c.edge()-c.left)/95), 2))
	for i, at := range marks {
		x := c.x(at)
		c.rule(x, c.floor(), x, c.floor()+5, "0.7")
		anchor := "middle"
		if x > c.edge()-26 {
			anchor = "end"
		}
		text := at.Format(layout)
		if i == 0 && !strings.Contains(layout, "2006") { // the year once
			text = at.Format("2 Jan 2006")
		}
		c.text(x, c.floor()+18, anchor, "fig-scale", ink, text)
	}
}

// scale returns a round step that takes five or fewer to the value, and the
// value rounded up to it. Whole steps are at least 1.
func scale(most float64, whole bool) (step, top float64) {
	if most <= 0 || math.IsNaN(most) || math.IsInf(most, 0) {
		return 1, 1
	}
	step = math.Pow(10, math.Floor(math.Log10(most/5)))
	for _, f := range []float64{1, 2, 5, 10} {
		if most/(step*f) <= 5 {
			step *= f
			break
		}
	}
	if whole {
		step = max(step, 1)
	}
	return step, step * math.Ceil(most/step-1e-9)
}

// plain writes a value of the scale.
func plain(v float64) string {
	if v >= 1e12 || math.IsNaN(v) {
		return strconv.FormatFloat(v, 'g', 3, 64)
	}
	s := strconv.FormatFloat(math.Round(v*1e9)/1e9, 'f', -1, 64)
	if v < 10_000 {
		return s
	}
	for i := len(s) - 3; i > 0; i -= 3 {
		s = s[:i] + "," + s[i:]
	}
	return s
}

// calendarStep is a distance between two dates of the axis.
type calendarStep struct {
	years, months, days int
	clock               time.Duration
	layout              string
}

var calendarSteps = []calendarStep{
	{clock: time.Minute, layout: "15:04"},
	{clock: 5 * time.Minute, layout: "15:04"},
	{clock: 15 * time.Minute, layout: "15:04"},
	{clock: time.Hour, layout: "15:04"},
	{clock: 3 * time.Hour, layout: "2 Jan 15:04"},
	{clock: 6 * time.Hour, layout: "2 Jan 15:04"},
	{clock: 12 * time.Hour, layout: "2 Jan 15:04"},
	{days: 1, layout: "2 Jan"},
	{days: 2, layout: "2 Jan"},
	{days: 7, layout: "2 Jan"},
	{days: 14, layout: "2 Jan 2006"},
	{months: 1, layout: "Jan 2006"},
	{months: 2, layout: "Jan 2006"},
	{months: 3, layout: "Jan 2006"},
	{months: 6, layout: "Jan 2006"},
	{years: 1, layout: "2006"},
	{years: 2, layout: "2006"},
	{years: 5, layout: "2006"},
	{years: 10, layout: "2006"},
	{years: 50, layout: "2006"},
}

// dates returns at most so many round dates in [from, to], and how they are
// written.
func dates(from, to time.Time, most int) ([]time.Time, string) {
	for _, s := range calendarSteps {
		if s.length() > 0 && int(to.Sub(from)/s.length()) > most+1 {
			continue
		}
		if marks := s.within(from, to); len(marks) <= most {
			return marks, s.layout
		}
	}
	return []time.Time{from, to}, "2006"
}

// length is about how long the step is.
func (s calendarStep) length() time.Duration {
	const day = 24 * time.Hour
	return s.clock + time.Duration(s.days+30*s.months+365*s.years)*day
}

// within returns the step's dates in [from, to].
func (s calendarStep) within(from, to time.Time) []time.Time {
	var marks []time.Time
	at := s.first(from)
	for !at.After(to) {
		if !at.Before(from) {
			marks = append(marks, at)
		}
		at = s.next(at)
	}
	return marks
}

// first is a round date of the step's kind at or before a time.
func (s calendarStep) first(t time.Time) time.Time {
	y, m, d := t.Date()
	midnight := time.Date(y, m, d, 0, 0, 0, 0, t.Location())
	switch {
	case s.clock > 0:
		return midnight.Add(t.Sub(midnight) / s.clock * s.clock)
	case s.days == 7 || s.days == 14: // from Monday
		return midnight.AddDate(0, 0, -(int(t.Weekday())+6)%7)
	case s.days > 0:
		return midnight
	case s.months > 0:
		return time.Date(y, m-time.Month((int(m)-1)%s.months), 1, 0, 0, 0, 0, t.Location())
	}
	return time.Date(y-y%s.years, 1, 1, 0, 0, 0, 0, t.Location())
}

func (s calendarStep) next(t time.Time) time.Time {
	if s.clock > 0 {
		return t.Add(s.clock)
	}
	return t.AddDate(s.years, s.months, s.days)
}
