// Package compare holds what several set-ups found in one history side by
// side: the excesses that each found, how much earlier or later, and at how
// many alerts a year.
//
// # Model
//
// An alert stands from the beginning of the window that opened it to when it
// returned, was withdrawn or closed, or to the end of the history. Alerts of
// different set-ups on one series and direction speak of the same excess if
// they stand at the same time for a moment: then they rang over the same
// events. All alerts that hang together so make one Span. A set-up found the
// span at the moment when its first alert in it opened. Of an alert that late
// data opened this is when those came, not when its look was due: before, nobody
// could know of it.
//
// Alerts that were withdrawn because the data were corrected are left out: no
// set-up found anything there.
//
// Alerts a year have Garwood's exact bounds (1936). The ratio of two set-ups'
// alerts a year has the exact conditional bounds of two Poisson rates
// (Clopper and Pearson 1934 on the share of one in both; Przyborowski and
// Wilenski 1940), as if each had been played over a history of its own. On one
// history their alerts go together, so these bounds are wider than need be;
// what only one of the two found is therefore tested by itself, exactly
// (binomial with one half; McNemar 1947).
//
// # Caveats
//
// More alerts are not better, nor fewer: which spans were real, the history
// does not say. Only a file of all known episodes does.
package compare

import (
	"tailbell/config"
	"tailbell/monitor/rehearse/plant"
	"tailbell/monitor/replay"
)

// Played is one set-up and what its replay came to.
type Played struct {
	Name   string
	Setup  *config.Setup
	Result *replay.Result
}

// Comparison is what several set-ups came to over one history.
type Comparison struct {
	// Level is that of all bounds.
	Level float64 `json:"level"`
	Sides []Side  `json:"setups"`
	Spans []Span  `json:"spans"`
	// Pairs hold each later set-up against the first.
	Pairs []Pair `json:"pairs"`
	// Episodes are the known ones; nil if none were given.
	Episodes []Known `json:"episodes,omitempty"`
}

// Side is one set-up.
type Side struct {
	Name       string         `json:"name"`
	Digest     string         `json:"digest"`
	Indicators []replay.Watch `json:"indicators"`
	// Total is that of all indicators.
	Total replay.Watch `json:"total"`
	// LooksAYear is how many looks were made a year.
	LooksAYear *float64 `json:"looks_a_year"`
	// Found spans, and Alone those that no other set-up found.
	Found int `json:"spans_found"`
	Alone int `json:"spans_found_alone"`
	// Episodes known that it found, and Alerts that none of them explains; nil
	// without known ones.
	Episodes    *int `json:"episodes_found,omitempty"`
	Unexplained *int `json:"alerts_in_no_episode,omitempty"`
}

// Of compares set-ups that were played over one history. Known are all
// episodes known in it; nil if that is not known. Level is that of the bounds,
// such as 0.95.
func Of(played []Played, known []plant.Episode, level float64) *Comparison {
	c := &Comparison{Level: level}
	alpha := 1 - level
	var alerts []stood
	for i := range played {
		p := &played[i]
		s := Side{Name: p.Name, Digest: p.Setup.Digest, Indicators: p.Result.Watches(p.Setup, alpha)}
		s.Total = total(s.Indicators, p.Result, alpha)
		if s.Total.Years > 0 {
			looks := float64(s.Total.Looks) / s.Total.Years
			s.LooksAYear = &looks
		}
		c.Sides = append(c.Sides, s)
		alerts = append(alerts, standing(p, i)...)
	}
	c.Spans = spans(alerts, len(played))
	for i := range c.Spans {
		c.count(&c.Spans[i])
	}
	if known != nil {
		c.hold(known, alerts)
	}
	for b := 1; b < len(played); b++ {
		c.Pairs = append(c.Pairs, c.pair(0, b))
	}
	return c
}

// total sums the indicators; what was looked at is from the first look of any
// to the last.
func total(list []replay.Watch, r *replay.Result, alpha float64) replay.Watch {
	t := replay.Watch{}
	for i := range list {
		w := &list[i]
		t.Series += w.Series
		t.Looks += w.Looks
		t.Withheld += w.Withheld
		t.Alerts += w.Alerts
		t.Late += w.Late
		t.Withdrawn += w.Withdrawn
		t.SeriesYears += w.SeriesYears
		t.Years = max(t.Years, w.Years)
	}
	t.AYear = replay.RateOf(int64(t.Alerts), t.Years, alpha)
	t.ASeriesYear = replay.RateOf(int64(t.Alerts), t.SeriesYears, alpha)
	return t
}

// count counts the span for those who found it.
func (c *Comparison) count(s *Span) {
	n := 0
	for i, f := range s.Found {
		if f != nil {
			n++
			c.Sides[i].Found++
		}
	}
	for i, f := range s.Found {
		if f != nil && n == 1 {
			c.Sides[i].Alone++
		}
	}
}
