package page

import (
	"context"
	"time"

	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/life"
	"tailbell/monitor/store"
)

// Part is one partition as the page reads it: in this process (Here), or in the
// one that owns it (Elsewhere).
type Part interface {
	// Alerts returns at most so many alerts, as a store does.
	Alerts(ctx context.Context, want AlertsWanted, after uint64, most int) ([]store.AlertRow, error)
	// Alert returns one; store.ErrNotFound if the partition has none of that id.
	Alert(ctx context.Context, id string) (store.AlertRow, error)
	// Refusals returns the counts by reason, and at most so many of the newest.
	Refusals(ctx context.Context, most int) (*Refusals, error)
	// Glances returns at most so many series from a number on.
	Glances(ctx context.Context, first, most int) (*Glances, error)
	// See reads one series, in one piece.
	See(ctx context.Context, want *Sight) (*Seen, error)
}

// AlertsWanted says which alerts are wanted, and in which order.
type AlertsWanted struct {
	Conditions  []life.Condition `json:"conditions,omitempty"`
	NotDone     bool             `json:"not_done,omitempty"`
	NewestFirst bool             `json:"newest_first,omitempty"`
}

// Refusals are what a partition has refused.
type Refusals struct {
	Counts map[monitor.Reason]uint64 `json:"counts"`
	Newest []store.RefusedRow        `json:"newest"`
}

// Glances are some of a partition's series at a glance.
type Glances struct {
	Setup *config.Setup `json:"-"`
	// Of is how many series there are in all, Next the number to go on with, 0
	// at the end.
	Of     int              `json:"of"`
	Next   int              `json:"next"`
	Series []monitor.Glance `json:"series"`
}

// Sight is what is wanted of a series: at most so many looks of a window up to a
// moment, and with Whole all that is told of it besides.
type Sight struct {
	Series string `json:"series"`
	// Window by its name. With Whole, one that there is not stands for the window
	// with the strongest evidence.
	Window string `json:"window"`
	// Until is the moment, the zero time for the partition's clock; no looks are
	// shown beyond the clock.
	Until time.Time `json:"until"`
	Looks int       `json:"looks"`
	Whole bool      `json:"whole,omitempty"`
	Slots int       `json:"slots,omitempty"` // with Whole
}

// Seen is what was found of a series.
type Seen struct {
	Setup *config.Setup `json:"-"`
	// Clock is the partition's, and History says that it is in history time.
	Clock   monitor.Instant `json:"clock"`
	History bool            `json:"history"`
	Views   []monitor.View  `json:"-"`

	// Known says that there is such a series; it and the rest are with Whole
	// only. Judged says that there is evidence of the window.
	Known    bool               `json:"known"`
	Window   string             `json:"window"`
	Glance   monitor.Glance     `json:"glance"`
	Evidence life.Evidence      `json:"evidence,omitzero"`
	Judged   bool               `json:"judged"`
	Slots    []monitor.SlotView `json:"slots,omitempty"`
	Changes  []monitor.Dated    `json:"changes,omitempty"`
}

// Here is a partition in this process.
type Here struct {
	Store *store.Store
	// Do runs look on the engine between two messages.
	Do func(ctx context.Context, look func(*monitor.Engine)) error
}

// Alerts implements Part.
func (h Here) Alerts(_ context.Context, want AlertsWanted, after uint64, most int) ([]store.AlertRow, error) {
	return h.Store.Alerts(store.AlertFilter{Conditions: want.Conditions, NotDone: want.NotDone, NewestFirst: want.NewestFirst}, after, most)
}

// Alert implements Part.
func (h Here) Alert(_ context.Context, id string) (store.AlertRow, error) { return h.Store.Alert(id) }

// Refusals implements Part.
func (h Here) Refusals(_ context.Context, most int) (*Refusals, error) {
	counts, err := h.Store.RefusedCount()
	if err != nil {
		return nil, err
	}
	var all uint64
	for _, n := range counts {
		all += n
	}
	rows, err := h.Store.Refused(all-min(all, uint64(most)), most)
	return &Refusals{counts, rows}, err
}

// Glances implements Part.
func (h Here) Glances(ctx context.Context, first, most int) (*Glances, error) {
	g := &Glances{}
	err := h.Do(ctx, func(e *monitor.Engine) {
		g.Setup, _ = e.Setup()
		g.Of = e.SeriesCount()
		g.Series = make([]monitor.Glance, 0, min(most, g.Of))
		g.Next = e.Glances(first, most, func(s monitor.Glance) { g.Series = append(g.Series, s) })
	})
	return g, err
}

// See implements Part.
func (h Here) See(ctx context.Context, want *Sight) (*Seen, error) {
	s := &Seen{Window: want.Window}
	err := h.Do(ctx, func(e *monitor.Engine) {
		s.Setup, _ = e.Setup()
		s.Clock, s.History = e.Clock(), e.InHistory()
		until := want.Until
		if now := s.Clock.Time(); until.IsZero() || now.Before(until) {
			until = now
		}
		if want.Whole && !s.whole(e, want) {
			return
		}
		s.Views = e.Latest(want.Series, s.Window, until, want.Looks)
	})
	return s, err
}

// whole reads what is told of a series besides its looks.
func (s *Seen) whole(e *monitor.Engine, want *Sight) bool {
	if s.Glance, s.Known = e.GlanceOf(want.Series); !s.Known {
		return false
	}
	in := indicatorOf(s.Setup, s.Glance.Indicator)
	if in == nil {
		s.Known = false
		return false
	}
	s.Window = windowOf(in, want.Window, s.Glance.Look.Window)
	s.Evidence, s.Judged = e.Standing(want.Series, s.Window)
	s.Slots = e.SlotsOf(want.Series, want.Slots)
	s.Changes = e.ChangesOf(want.Series)
	return true
}

// indicatorOf is the indicator of a name, nil if there is none.
func indicatorOf(setup *config.Setup, name string) *config.Indicator {
	if setup == nil {
		return nil
	}
	for i := range setup.Indicators {
		if setup.Indicators[i].Name == name {
			return &setup.Indicators[i]
		}
	}
	return nil
}
