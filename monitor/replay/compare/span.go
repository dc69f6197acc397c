package compare

import (
	"cmp"
	"slices"
	"time"

	"tailbell/monitor/life"
)

// Span is a stretch of one series in which one set-up or more rang.
type Span struct {
	Series    string         `json:"series"`
	Direction life.Direction `json:"direction"`
	// From is the beginning of the earliest window that opened an alert, To
	// when the last alert ended.
	From time.Time `json:"from"`
	To   time.Time `json:"to"`
	// Zone is the IANA zone of all its times: that in which the indicator of
	// its first alert keeps its calendar.
	Zone string `json:"zone"`
	// Found is what each set-up found, in their order; nil for nothing.
	Found []*Found `json:"found"`
}

// Found is what one set-up found of a span or an episode.
type Found struct {
	// Opened is the moment when the first alert opened, Due when its opening
	// look was due, both in its indicator's zone. Late says that data which came
	// after that look opened it: Opened is then after Due.
	Opened time.Time `json:"opened"`
	Due    time.Time `json:"due"`
	Late   bool      `json:"late"`
	// Alert is the first one's id, and Alerts how many there were.
	Alert  string  `json:"alert"`
	Alerts int     `json:"alerts"`
	P      float64 `json:"p"`
	Log10P float64 `json:"log10_p"`
	Events int64   `json:"events"`
	Window string  `json:"window"`
	// Days after the beginning of an episode; nil for a span.
	Days *float64 `json:"days,omitempty"`
}

// stood is one alert while it stood.
type stood struct {
	side     int
	record   *life.Record
	from, to time.Time
	opened   time.Time      // when it opened, which of a late one is after its look was due
	zone     *time.Location // its indicator's
	root     int            // of the alerts that hang together
}

// standing returns the alerts of a replay as they ended, but those withdrawn.
func standing(p *Played, side int) []stood {
	zones := map[string]*time.Location{}
	for i := range p.Setup.Indicators {
		zones[p.Setup.Indicators[i].Name] = p.Setup.Indicators[i].Zone
	}
	r := p.Result
	at := map[string]int{}
	var list []stood
	for i := range r.Steps {
		n := &r.Steps[i]
		k, known := at[n.Record.ID]
		if !known {
			k = len(list)
			at[n.Record.ID] = k
			zone := zones[n.Record.Indicator]
			if zone == nil {
				zone = time.UTC
			}
			list = append(list, stood{side: side, to: r.Clock.Time().In(zone), zone: zone})
		}
		s := &list[k]
		s.record, s.from, s.opened = &n.Record, n.Record.Opening.From.In(s.zone), n.Record.OpenedAt().In(s.zone)
		switch n.Step.Kind {
		case life.StepReturned:
			s.to = n.Step.At.In(s.zone)
		case life.StepClosed:
			if n.Step.At.Before(s.to) {
				s.to = n.Step.At.In(s.zone)
			}
		case life.StepOpened, life.StepWorsened, life.StepCorrected, life.StepWithdrawn, life.StepAcknowledged, life.StepNote, life.StepMarked,
			life.StepShelved, life.StepUnshelved, life.StepReminder, life.StepTest:
		}
	}
	return slices.DeleteFunc(list, func(s stood) bool { return s.record.Condition == life.Withdrawn })
}

// spans puts together the alerts that hang together, in order of time.
func spans(alerts []stood, sides int) []Span {
	for i := range alerts {
		alerts[i].root = i
	}
	root := func(i int) int {
		for alerts[i].root != i {
			i = alerts[i].root
		}
		return i
	}
	byPlace := map[string][]int{}
	for i := range alerts {
		key := alerts[i].record.Series + "\n" + string(alerts[i].record.Direction)
		byPlace[key] = append(byPlace[key], i)
	}
	for _, list := range byPlace {
		for x, i := range list {
			for _, k := range list[:x] {
				a, b := &alerts[i], &alerts[k]
				if a.side != b.side && !a.from.After(b.to) && !b.from.After(a.to) {
					a, b := root(i), root(k)
					alerts[max(a, b)].root = min(a, b)
				}
			}
		}
	}
	found := map[int]*Span{}
	for i := range alerts {
		r := root(i)
		s := found[r]
		if s == nil {
			a := &alerts[i]
			s = &Span{
				Series: a.record.Series, Direction: a.record.Direction, From: a.from, To: a.to, Zone: a.zone.String(), Found: make([]*Found, sides),
			}
			found[r] = s
		}
		s.take(&alerts[i])
	}
	list := make([]Span, 0, len(found))
	for _, s := range found {
		list = append(list, *s)
	}
	slices.SortFunc(list, func(a, b Span) int {
		return cmp.Or(a.From.Compare(b.From), cmp.Compare(a.Series, b.Series), cmp.Compare(a.Direction, b.Direction), a.To.Compare(b.To))
	})
	return list
}

func (s *Span) take(a *stood) {
	if a.from.Before(s.From) {
		s.From = a.from.In(s.From.Location())
	}
	if a.to.After(s.To) {
		s.To = a.to.In(s.To.Location())
	}
	f := a.found()
	if had := s.Found[a.side]; had != nil {
		f.Alerts += had.Alerts
		if !f.Opened.Before(had.Opened) {
			had.Alerts = f.Alerts
			return
		}
	}
	s.Found[a.side] = f
}

func (a *stood) found() *Found {
	r, e := a.record, &a.record.Opening
	return &Found{
		Opened: a.opened, Due: r.Opened.In(a.zone), Late: r.Late,
		Alert: r.ID, Alerts: 1, P: e.P, Log10P: e.Log10P, Events: e.Events, Window: e.Window,
	}
}
