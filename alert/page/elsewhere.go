package page

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"math"
	"strconv"
	"sync"
	"time"

	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/store"
)

// Question is one reading of a partition in another process: exactly one of the
// pointers is set.
type Question struct {
	Alerts   *AlertsQuestion  `json:"alerts,omitempty"`
	Alert    *string          `json:"alert,omitempty"`    // its id
	Refusals *int             `json:"refusals,omitempty"` // how many at most
	Glances  *GlancesQuestion `json:"glances,omitempty"`
	See      *Sight           `json:"see,omitempty"`
	// Setup is the digest of the set-up that the asker has: its text is told only
	// where another one is in force.
	Setup string `json:"setup,omitempty"`
}

// AlertsQuestion asks for alerts, see Part.
type AlertsQuestion struct {
	Want  AlertsWanted `json:"want"`
	After uint64       `json:"after"`
	Most  int          `json:"most"`
}

// GlancesQuestion asks for series, see Part.
type GlancesQuestion struct {
	First int `json:"first"`
	Most  int `json:"most"`
}

// Reply answers a Question.
type Reply struct {
	Alerts []store.AlertRow `json:"alerts,omitempty"`
	// More says that there are more alerts than the reply has room for.
	More     bool      `json:"more,omitempty"`
	Missing  bool      `json:"missing,omitempty"` // there is no such alert
	Refusals *Refusals `json:"refusals,omitempty"`
	Glances  *Glances  `json:"glances,omitempty"`
	Looks    []odd     `json:"looks,omitempty"` // of the glances
	Seen     *Seen     `json:"seen,omitempty"`
	Views    []odd     `json:"views,omitempty"` // of what was seen
	Glance   *odd      `json:"glance,omitempty"`
	Setup    string    `json:"setup,omitempty"` // digest of the one in force
	Text     []byte    `json:"setup_text,omitempty"`
}

// replyBytes is about how much of alerts one reply holds: a message of the bus
// takes a mebibyte or more.
const replyBytes = 400 << 10

// mostGlances is how many series one reply holds.
const mostGlances = 500

// Answer answers a question about a partition that is here.
func Answer(ctx context.Context, p Here, q *Question) (*Reply, error) {
	switch {
	case q.Alerts != nil:
		return answerAlerts(ctx, p, q.Alerts)
	case q.Alert != nil:
		row, err := p.Alert(ctx, *q.Alert)
		if isNotFound(err) {
			return &Reply{Missing: true}, nil
		}
		return &Reply{Alerts: []store.AlertRow{row}}, err
	case q.Refusals != nil:
		r, err := p.Refusals(ctx, min(*q.Refusals, mostGlances))
		return &Reply{Refusals: r}, err
	case q.Glances != nil:
		g, err := p.Glances(ctx, q.Glances.First, min(q.Glances.Most, mostGlances))
		if err != nil {
			return nil, err
		}
		r := (&Reply{Glances: g}).under(g.Setup, q)
		for i := range g.Series {
			r.Looks = append(r.Looks, strange(&g.Series[i].Look))
			g.Series[i].Look = monitor.View{}
		}
		return r, nil
	case q.See != nil:
		s, err := p.See(ctx, q.See)
		if err != nil {
			return nil, err
		}
		r := (&Reply{Seen: s}).under(s.Setup, q)
		for i := range s.Views {
			r.Views = append(r.Views, strange(&s.Views[i]))
		}
		look := strange(&s.Glance.Look)
		r.Glance, s.Glance.Look = &look, monitor.View{}
		return r, nil
	}
	return nil, errors.New("a question that asks for nothing this version knows")
}

// under says which set-up is in force.
func (r *Reply) under(setup *config.Setup, q *Question) *Reply {
	if setup == nil {
		return r
	}
	if r.Setup = setup.Digest; r.Setup != q.Setup {
		r.Text = setup.Text
	}
	return r
}

// answerAlerts returns as many alerts as a reply has room for, one at least.
func answerAlerts(ctx context.Context, p Here, q *AlertsQuestion) (*Reply, error) {
	rows, err := p.Alerts(ctx, q.Want, q.After, min(q.Most, mostGlances))
	if err != nil {
		return nil, err
	}
	size := 0
	for i := range rows {
		text, err := json.Marshal(&rows[i].Record)
		if err != nil {
			return nil, fmt.Errorf("encoding alert %s: %w", rows[i].Record.ID, err)
		}
		if size += len(text); i > 0 && size > replyBytes {
			return &Reply{Alerts: rows[:i], More: true}, nil
		}
	}
	return &Reply{Alerts: rows, More: len(rows) == mostGlances && q.Most > mostGlances}, nil
}

// odd is a look with the numbers that JSON has no word for, such as the p of a
// look that was not made.
type odd struct {
	monitor.View
	Odd map[string]string `json:"odd,omitempty"` // by their place
}

func numbersOf(v *monitor.View) []*float64 {
	return []*float64{&v.Expected, &v.Upper.P, &v.Upper.Log10P, &v.Upper.Limit, &v.Lower.P, &v.Lower.Log10P, &v.Lower.Limit}
}

// strange takes odd numbers out of a look, and keeps them beside it.
func strange(v *monitor.View) odd {
	o := odd{View: *v}
	for i, x := range numbersOf(&o.View) {
		if math.IsNaN(*x) || math.IsInf(*x, 0) {
			if o.Odd == nil {
				o.Odd = map[string]string{}
			}
			o.Odd[strconv.Itoa(i)] = strconv.FormatFloat(*x, 'g', -1, 64)
			*x = 0
		}
	}
	return o
}

// view puts them back, with times in the zone of the look's indicator.
func (o *odd) view(setup *config.Setup) (monitor.View, error) {
	v := o.View
	numbers := numbersOf(&v)
	for place, text := range o.Odd {
		i, err := strconv.Atoi(place)
		if err != nil || i < 0 || i >= len(numbers) {
			return v, fmt.Errorf("a look with an odd number at %q", place)
		}
		if *numbers[i], err = strconv.ParseFloat(text, 64); err != nil {
			return v, fmt.Errorf("a look with an odd number: %w", err)
		}
	}
	if in := indicatorOf(setup, v.Indicator); in != nil {
		v.Start, v.End, v.Due = v.Start.In(in.Zone), v.End.In(in.Zone), v.Due.In(in.Zone)
	}
	return v, nil
}

// Elsewhere is a partition in another process.
type Elsewhere struct {
	// Ask asks its owner.
	Ask func(ctx context.Context, q *Question) (*Reply, error)

	mu    sync.Mutex
	setup *config.Setup // that was in force when last asked
}

// Alerts implements Part.
func (p *Elsewhere) Alerts(ctx context.Context, want AlertsWanted, after uint64, most int) ([]store.AlertRow, error) {
	var rows []store.AlertRow
	for len(rows) < most {
		r, err := p.Ask(ctx, &Question{Alerts: &AlertsQuestion{want, after, most - len(rows)}})
		if err != nil {
			return nil, err
		}
		rows = append(rows, r.Alerts...)
		if !r.More || len(r.Alerts) == 0 {
			break
		}
		after = rows[len(rows)-1].Number
	}
	return rows, nil
}

// Alert implements Part.
func (p *Elsewhere) Alert(ctx context.Context, id string) (store.AlertRow, error) {
	r, err := p.Ask(ctx, &Question{Alert: &id})
	if err != nil {
		return store.AlertRow{}, err
	}
	if r.Missing || len(r.Alerts) != 1 {
		return store.AlertRow{}, fmt.Errorf("alert %q: %w", id, store.ErrNotFound)
	}
	return r.Alerts[0], nil
}

// Refusals implements Part.
func (p *Elsewhere) Refusals(ctx context.Context, most int) (*Refusals, error) {
	r, err := p.Ask(ctx, &Question{Refusals: &most})
	if err == nil && r.Refusals == nil {
		err = errEmpty
	}
	if err != nil {
		return nil, err
	}
	return r.Refusals, nil
}

var errEmpty = errors.New("the owner of the partition answered something else: it runs another version")

// Glances implements Part.
func (p *Elsewhere) Glances(ctx context.Context, first, most int) (*Glances, error) {
	r, err := p.askUnder(ctx, &Question{Glances: &GlancesQuestion{first, most}})
	if err != nil {
		return nil, err
	}
	g := r.Glances
	if g == nil || len(r.Looks) != len(g.Series) {
		return nil, errEmpty
	}
	if g.Setup, err = p.under(r); err != nil {
		return nil, err
	}
	for i := range g.Series {
		if g.Series[i].Look, err = r.Looks[i].view(g.Setup); err != nil {
			return nil, err
		}
	}
	return g, nil
}

// See implements Part.
func (p *Elsewhere) See(ctx context.Context, want *Sight) (*Seen, error) {
	r, err := p.askUnder(ctx, &Question{See: want})
	if err != nil {
		return nil, err
	}
	s := r.Seen
	if s == nil || r.Glance == nil {
		return nil, errEmpty
	}
	if s.Setup, err = p.under(r); err != nil {
		return nil, err
	}
	for i := range r.Views {
		v, err := r.Views[i].view(s.Setup)
		if err != nil {
			return nil, err
		}
		s.Views = append(s.Views, v)
	}
	if s.Glance.Look, err = r.Glance.view(s.Setup); err != nil {
		return nil, err
	}
	s.placeTimes()
	return s, nil
}

// placeTimes puts times into the zone of the series' indicator.
func (s *Seen) placeTimes() {
	in := indicatorOf(s.Setup, s.Glance.Indicator)
	if in == nil {
		return
	}
	for i := range s.Slots {
		s.Slots[i].Start, s.Slots[i].End = s.Slots[i].Start.In(in.Zone), s.Slots[i].End.In(in.Zone)
	}
	for i := range s.Changes {
		s.Changes[i].At = s.Changes[i].At.In(in.Zone)
	}
	for _, t := range []*time.Time{&s.Evidence.From, &s.Evidence.To, &s.Evidence.Due} {
		*t = t.In(in.Zone)
	}
}

// askUnder asks, and says which set-up is known.
func (p *Elsewhere) askUnder(ctx context.Context, q *Question) (*Reply, error) {
	p.mu.Lock()
	if p.setup != nil {
		q.Setup = p.setup.Digest
	}
	p.mu.Unlock()
	return p.Ask(ctx, q)
}

// under returns the set-up that is in force, nil for none.
func (p *Elsewhere) under(r *Reply) (*config.Setup, error) {
	if r.Setup == "" {
		return nil, nil
	}
	p.mu.Lock()
	defer p.mu.Unlock()
	if p.setup != nil && p.setup.Digest == r.Setup {
		return p.setup, nil
	}
	setup, err := config.Parse(r.Text, "the set-up in force")
	if err != nil {
		return nil, fmt.Errorf("the set-up in force elsewhere: %w", err)
	}
	p.setup = setup
	return setup, nil
}
