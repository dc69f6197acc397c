package monitor

import (
	"time"

	"tailbell/config"
)

// Listed is what is known of a series apart from its counts.
type Listed struct {
	Series    string `json:"series"`
	Indicator string `json:"indicator"`
	// Members are the series that a sum sums; 0 for a series.
	Members int `json:"members,omitempty"`
	// Begins is its first slot, nil before it has one; Heard is the clock when
	// something was last counted, nil for a sum and where nothing was yet.
	Begins *time.Time `json:"begins"`
	Heard  *time.Time `json:"heard"`
	// Condition is "open", "not yet open", "closed" or "out of service", as of the clock; Until
	// is when it is back in service.
	Condition string     `json:"condition"`
	Until     *time.Time `json:"until,omitempty"`
	// Events and Exposure are signed off up to there, nil if never.
	Events   *time.Time `json:"events_signed_off"`
	Exposure *time.Time `json:"exposure_signed_off"`
	// Retired is when it ended, of one that is monitored no longer; its condition is
	// "ended" then.
	Retired *time.Time `json:"retired,omitempty"`
	// Acts are what people said of it that still matters, by date.
	Acts []Dated `json:"acts,omitempty"`
}

// List returns the series that match the pattern, in order of appearance: those
// among the next n from the given number on. next is where to go on, -1 at the
// end.
func (e *Engine) List(pattern config.Pattern, from, n int) (list []Listed, next int) {
	end := min(from+n, len(e.series))
	for _, s := range e.series[min(from, end):end] {
		if !s.retired && pattern.Match(s.name) {
			list = append(list, e.listed(s))
		}
	}
	if next = end; end == len(e.series) {
		next = -1
	}
	return list, next
}

// Ended returns what is remembered of the series that match the pattern and are
// monitored no longer, as List does.
func (e *Engine) Ended(pattern config.Pattern, from, n int) (list []Listed, next int) {
	end := min(from+n, len(e.series))
	for number := from; number < end; number++ {
		x := e.stubs.byNumber[uint32(number)]
		if x == nil || x.name == "" || !pattern.Match(x.name) {
			continue
		}
		l := Listed{Series: x.name, Indicator: x.indicator, Condition: "ended"}
		zone := time.UTC
		for _, ix := range e.indicators {
			if ix.cfg.Name == x.indicator {
				zone = ix.cfg.Zone
			}
		}
		at := x.at.in(zone)
		if l.Retired = &at; x.seen != 0 {
			seen := x.seen.in(zone)
			l.Heard = &seen
		}
		list = append(list, l)
	}
	if next = end; end == len(e.series) {
		next = -1
	}
	return list, next
}

// Matching counts the series that match the pattern, sums among them.
func (e *Engine) Matching(pattern string) int {
	return len(e.matched(&fact{Series: pattern}))
}

func (e *Engine) listed(s *series) Listed {
	ix := s.indicator
	when := func(i Instant) *time.Time {
		t := i.in(ix.cfg.Zone)
		return &t
	}
	l := Listed{Series: s.name, Indicator: ix.cfg.Name, Condition: "open", Acts: e.factsOf(ix, s.name)}
	if s.sum != nil {
		l.Members = len(s.sum.members)
	} else if !s.neverHeard() {
		l.Heard = when(s.seen)
	}
	if s.birth != unborn {
		l.Begins = when(ix.cal.Start(s.birth))
	}
	d := s.dates
	if d == nil {
		return l
	}
	if now := ix.cal.Slot(e.clock); !d.isOpen(now) {
		if l.Condition = closed.String(); d.turns[0].slot > now { // it opens
			l.Condition = "not yet open"
		}
	} else if d.isOut(now) {
		l.Condition = idle.String()
		until := now
		for d.isOut(until) {
			until++
		}
		l.Until = when(ix.cal.Start(until))
	}
	for side, to := range []**time.Time{&l.Events, &l.Exposure} {
		last := Beginning
		for _, x := range d.signed[side] {
			last = max(last, ix.cal.Start(x.to))
		}
		if last != Beginning {
			*to = when(last)
		}
	}
	return l
}
