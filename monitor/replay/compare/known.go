package compare

import (
	"time"

	"tailbell/monitor/life"
	"tailbell/monitor/rehearse/plant"
)

// Known is a known episode and what each set-up found of it.
type Known struct {
	Series    string         `json:"series"` // as it was given, perhaps a pattern
	Direction life.Direction `json:"direction"`
	From      time.Time      `json:"from"` // From and To as they were given
	To        time.Time      `json:"to"`
	Note      string         `json:"note,omitempty"`
	Found     []*Found       `json:"found"`
}

// hold holds the alerts against all known episodes. An alert speaks of an
// episode if the window that opened it holds some of it.
func (c *Comparison) hold(known []plant.Episode, alerts []stood) {
	c.Episodes = []Known{}
	explained := make([]bool, len(alerts))
	found := make([]int, len(c.Sides))
	for i := range known {
		e := &known[i]
		k := Known{Series: e.Series.String(), Direction: e.Direction, From: e.From, To: e.To, Note: e.Note, Found: make([]*Found, len(c.Sides))}
		for a := range alerts {
			if s := &alerts[a]; overlaps(e, s.record) {
				explained[a] = true
				k.take(s)
			}
		}
		for side, f := range k.Found {
			if f != nil {
				found[side]++
			}
		}
		c.Episodes = append(c.Episodes, k)
	}
	unexplained := make([]int, len(c.Sides))
	for a := range alerts {
		if !explained[a] {
			unexplained[alerts[a].side]++
		}
	}
	for i := range c.Sides {
		c.Sides[i].Episodes, c.Sides[i].Unexplained = &found[i], &unexplained[i]
	}
}

// overlaps reports whether the window that opened an alert holds some of the
// episode.
func overlaps(e *plant.Episode, r *life.Record) bool {
	return r.Direction == e.Direction && e.Series.Match(r.Series) && r.Opening.From.Before(e.To) && r.Opening.To.After(e.From)
}

// take keeps the alert of each set-up that opened first.
func (k *Known) take(s *stood) {
	f := s.found()
	days := f.Opened.Sub(k.From).Hours() / 24
	f.Days = &days
	if had := k.Found[s.side]; had != nil {
		f.Alerts += had.Alerts
		if !f.Opened.Before(had.Opened) {
			had.Alerts = f.Alerts
			return
		}
	}
	k.Found[s.side] = f
}
