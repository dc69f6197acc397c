package report

import (
	"slices"

	"tailbell/alert/figure"
	"tailbell/alert/words"
	"tailbell/monitor/life"
)

// spanOf is the time in which an alert signalled.
func (r *Recorder) spanOf(a *life.Record) figure.Span {
	s := figure.Span{Kind: figure.Alert, From: a.Opening.To, To: r.to, Text: "alert " + a.ID}
	if a.Mark == life.MarkReal {
		s.Kind = figure.Real
	}
	over := slices.IndexFunc(a.Steps, func(s life.Step) bool {
		return s.Kind == life.StepReturned || s.Kind == life.StepWithdrawn || s.Kind == life.StepClosed
	})
	if over >= 0 {
		s.To = a.Steps[over].At
	}
	if s.To.Before(s.From) {
		s.To = s.From
	}
	return s
}

// around draws the opening window from a few windows before the alert to one
// after it.
func (r *Recorder) around(in *Indicator, a *Alert) *Picture {
	k := key{in.Cfg.Name, a.Series, a.Opening.Window}
	span := r.spanOf(&a.Record)
	length := a.Opening.To.Sub(a.Opening.From)
	from, to := a.Opening.From.Add(-2*length), span.To.Add(length)
	var points []figure.Point
	var worst []float64
	for i, p := range r.looks[k] {
		if !p.At.Before(from) && !p.At.After(to) {
			points, worst = append(points, p), append(worst, r.worst[k][i])
		}
	}
	if len(points) < 2 {
		return nil
	}
	f := r.figure(in, k, thin(points, worst), len(points))
	f.Spans = []figure.Span{span}
	f.Height = 220
	if a.Condition == life.Withdrawn {
		f.Note = "Drawn from the data as they were corrected: no look signals any more."
	}
	return f
}

func (r *Recorder) figure(in *Indicator, k key, points []figure.Point, of int) *Picture {
	return &Picture{Looks: of, Series: figure.Series{
		Title: k.series + ", windows of " + words.Length(k.window), Events: in.Cfg.EventNoun, Unit: per(in), Window: words.Length(k.window), Points: points,
	}}
}

// draw draws the whole history of a series, a picture for each window.
func (r *Recorder) draw(in *Indicator, s *Series) {
	for i := range in.Cfg.Windows {
		k := key{in.Cfg.Name, s.Name, in.Cfg.Windows[i].Name}
		points := thin(r.looks[k], r.worst[k])
		if len(points) < 2 {
			continue
		}
		f := r.figure(in, k, points, len(r.looks[k]))
		for j := range in.Alerts {
			if a := &in.Alerts[j]; a.Series == s.Name {
				f.Spans = append(f.Spans, r.spanOf(&a.Record))
			}
		}
		s.Pictures = append(s.Pictures, f)
	}
}

// mostPoints is how many looks a picture shows.
const mostPoints = 420

// thin keeps, of each of so many equal stretches, the look with the smallest p,
// one that was not made before those.
func thin(points []figure.Point, log10p []float64) []figure.Point {
	if len(points) <= mostPoints {
		return points
	}
	var kept []figure.Point
	for i := range mostPoints {
		from, to := i*len(points)/mostPoints, (i+1)*len(points)/mostPoints
		best := from
		for j := from; j < to; j++ {
			if weight(&points[j], log10p[j]) < weight(&points[best], log10p[best]) {
				best = j
			}
		}
		kept = append(kept, points[best])
	}
	return kept
}

// weight is less the more a look has to say: log10 p, and for one that was not
// made that of a p of 0.03.
func weight(p *figure.Point, log10p float64) float64 {
	if !p.Made {
		return -1.5
	}
	return log10p
}
