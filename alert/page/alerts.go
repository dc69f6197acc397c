package page

import (
	"cmp"
	"context"
	"slices"
	"sync"
	"time"

	"tailbell/monitor/life"
)

const (
	// maxOpen is how many alerts that are not done are read of a partition.
	maxOpen = 300
	// openAge is how old the list of them may be.
	openAge = 500 * time.Millisecond
	// pastAtOnce is how many alerts are read in one piece.
	pastAtOnce = 256
)

// openAlerts keeps the alerts that are not done.
type openAlerts struct {
	mu      sync.Mutex
	records []life.Record // the most urgent first
	more    bool          // than were read
	commits uint64
	at      time.Time
}

// standing returns the alerts that are not done, the most urgent first, and
// whether there are more.
func (p *Page) standing(ctx context.Context) ([]life.Record, bool, error) {
	o := &p.open
	o.mu.Lock()
	defer o.mu.Unlock()
	commits, now := p.commits.Load(), p.o.Now()
	if rest := openAge - now.Sub(o.at); o.records != nil && (o.commits == commits || rest > 0) {
		if o.commits != commits {
			p.owe(rest)
		}
		return o.records, o.more, nil
	}
	records, more := []life.Record{}, false
	for i := range p.o.Parts {
		rows, err := p.o.Parts[i].Alerts(ctx, AlertsWanted{NotDone: true, NewestFirst: true}, 0, maxOpen)
		if err != nil {
			return nil, false, err
		}
		more = more || len(rows) == maxOpen
		for j := range rows {
			records = append(records, rows[j].Record)
		}
	}
	slices.SortStableFunc(records, func(a, b life.Record) int {
		return cmp.Or(
			cmp.Compare(urgency(a.Condition), urgency(b.Condition)),
			cmp.Compare(a.Worst.Log10P, b.Worst.Log10P),
			b.OpenedAt().Compare(a.OpenedAt()),
		)
	})
	o.records, o.more, o.commits, o.at = records, more, commits, now
	return records, more, nil
}

// forget makes the next request read the alerts anew.
func (p *Page) forget() {
	p.open.mu.Lock()
	p.open.records = nil
	p.open.mu.Unlock()
}

// urgency sorts conditions: what nobody has acknowledged comes first.
func urgency(c life.Condition) int {
	switch c {
	case life.Unacknowledged:
		return 0
	case life.Returned:
		return 1
	case life.Acknowledged:
		return 2
	case life.Shelved:
		return 3
	case life.Closed, life.Withdrawn:
		return 4
	}
	return 3
}

// pastAlerts knows the ids of all alerts by series. It reads the stores' alerts
// once, then only those that have come.
type pastAlerts struct {
	mu    sync.Mutex
	ids   map[string][]string // oldest first
	after []uint64            // by partition, the number of the last one read
}

// idsOf returns the ids of a series' alerts, the newest first, and whether all
// alerts were read in the time.
func (p *Page) idsOf(ctx context.Context, series string) (ids []string, all bool, err error) {
	past := &p.past
	past.mu.Lock()
	defer past.mu.Unlock()
	for i := range p.o.Parts {
		for {
			if ctx.Err() != nil {
				return newest(past.ids[series]), false, nil
			}
			rows, err := p.o.Parts[i].Alerts(ctx, AlertsWanted{}, past.after[i], pastAtOnce)
			if err != nil {
				return nil, false, err
			}
			for j := range rows {
				r := &rows[j].Record
				past.ids[r.Series] = append(past.ids[r.Series], r.ID)
				past.after[i] = rows[j].Number
			}
			if len(rows) < pastAtOnce {
				break
			}
		}
	}
	return newest(past.ids[series]), true, nil
}

func newest(ids []string) []string {
	turned := slices.Clone(ids)
	slices.Reverse(turned)
	return turned
}

// find returns the alert with an id.
func (p *Page) find(ctx context.Context, id string) (*life.Record, error) {
	for i := range p.o.Parts {
		row, err := p.o.Parts[i].Alert(ctx, id)
		if err == nil {
			return &row.Record, nil
		}
		if !isNotFound(err) {
			return nil, err
		}
	}
	return nil, &problem{404, "There is no alert " + id + ".", "The record holds all alerts."}
}
