package divide

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"

	"tailbell/monitor/life"
	"tailbell/monitor/store"
)

// Alerts says how the alerts of the new stores compare with those of the old.
type Alerts struct {
	Old int `json:"before"`
	New int `json:"after"`
	// Same are equal to the byte; Alike but for what depends on how many series
	// a partition sees.
	Same  int `json:"same"`
	Alike int `json:"alike"`
	// Differing and Lost name alerts, up to a cap, and MoreDiffering counts the
	// differing ones beyond it.
	Differing     []string `json:"differing,omitempty"`
	MoreDiffering int      `json:"more_differing,omitempty"`
	Lost          []string `json:"lost,omitempty"`
}

// named is how many alerts are named at most.
const named = 20

// Balanced reports whether no alert was lost, added or changed.
func (a *Alerts) Balanced() bool {
	return a.Old == a.New && len(a.Lost) == 0 && len(a.Differing) == 0
}

// CompareAlerts compares all alerts.
func CompareAlerts(old, next []*store.Store) (*Alerts, error) {
	a := &Alerts{}
	for _, st := range next {
		if err := eachAlert(st, func(*life.Record) error { a.New++; return nil }); err != nil {
			return nil, err
		}
	}
	for _, st := range old {
		err := eachAlert(st, func(was *life.Record) error {
			a.Old++
			is, err := find(next, was.ID)
			if err != nil {
				return err
			}
			return a.compare(was, is)
		})
		if err != nil {
			return nil, err
		}
	}
	return a, nil
}

func eachAlert(st *store.Store, use func(*life.Record) error) error {
	for after := uint64(0); ; {
		rows, err := st.Alerts(store.AlertFilter{}, after, most)
		if err != nil || len(rows) == 0 {
			return err
		}
		for i := range rows {
			if err := use(&rows[i].Record); err != nil {
				return err
			}
			after = rows[i].Number
		}
	}
}

// find returns the record of an alert, nil if there is none.
func find(stores []*store.Store, id string) (*life.Record, error) {
	for _, st := range stores {
		row, err := st.Alert(id)
		if err == nil {
			return &row.Record, nil
		}
		if !errors.Is(err, store.ErrNotFound) {
			return nil, err
		}
	}
	return nil, nil
}

func (a *Alerts) compare(was, is *life.Record) error {
	if is == nil {
		if len(a.Lost) < named {
			a.Lost = append(a.Lost, was.ID)
		}
		return nil
	}
	same, err := equal(was, is)
	if err != nil || same {
		a.Same++
		return err
	}
	loosen(was)
	loosen(is)
	if same, err = equal(was, is); err != nil || same {
		a.Alike++
		return err
	}
	if len(a.Differing) < named {
		a.Differing = append(a.Differing, was.ID)
	} else {
		a.MoreDiffering++
	}
	return nil
}

func equal(a, b *life.Record) (bool, error) {
	one, err := json.Marshal(a)
	if err != nil {
		return false, fmt.Errorf("encoding alert %s: %w", a.ID, err)
	}
	other, err := json.Marshal(b)
	if err != nil {
		return false, fmt.Errorf("encoding alert %s: %w", b.ID, err)
	}
	return bytes.Equal(one, other), nil
}

// loosen takes out what depends on how many series a partition sees: what an
// allowance amounts to for all of them.
func loosen(r *life.Record) {
	evidence := []*life.Evidence{&r.Opening, &r.Worst}
	for i := range r.Steps {
		if r.Steps[i].Evidence != nil {
			evidence = append(evidence, r.Steps[i].Evidence)
		}
	}
	for _, e := range evidence {
		if e.Allowance != nil {
			own := *e.Allowance
			own.Series, own.All = 0, 0
			e.Allowance = &own
		}
	}
}
