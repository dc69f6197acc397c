package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"time"

	"tailbell/alert/page"
	"tailbell/ingest/control"
	"tailbell/monitor"
	"tailbell/monitor/store"
)

// pagePart is a partition as the page reads it, wherever it is at present: it
// may come and go where processes share the partitions.
type pagePart struct {
	d         *daemon
	number    int
	elsewhere *page.Elsewhere
}

func (d *daemon) pagePart(number int) *pagePart {
	p := &pagePart{d: d, number: number, elsewhere: &page.Elsewhere{}}
	p.elsewhere.Ask = p.ask
	return p
}

// here is how the page reads a partition that is open here.
func (p *part) here() page.Here {
	return page.Here{Store: p.store, Do: func(ctx context.Context, look func(*monitor.Engine)) error {
		ctx, cancel := context.WithTimeout(ctx, pagePatience)
		defer cancel()
		return p.do(ctx, look)
	}}
}

// now is the partition where it is.
func (p *pagePart) now() page.Part {
	if here := p.d.parts.get(p.number); here != nil {
		return here.here()
	}
	return p.elsewhere
}

// lookRequest is a question of the page of another process.
type lookRequest struct {
	Partition int            `json:"partition"`
	Question  *page.Question `json:"question"`
}

// ask asks the owner of the partition; for a moment again while it is on its way
// from one process to another.
func (p *pagePart) ask(ctx context.Context, q *page.Question) (*page.Reply, error) {
	if !p.d.setup.Bus.Share {
		return nil, fmt.Errorf("partition %d is not open", p.number)
	}
	body, err := json.Marshal(lookRequest{p.number, q})
	if err != nil {
		return nil, err
	}
	ctx, cancel := context.WithTimeout(ctx, pagePatience)
	defer cancel()
	for {
		answer, err := (&front{p.d}).owner(ctx, p.number, verbLook, body)
		if err == nil {
			raw, _ := answer.(json.RawMessage) //nolint:errcheck // anything else is no reply, below
			r := &page.Reply{}
			if err := json.Unmarshal(raw, r); err != nil {
				return nil, fmt.Errorf("the owner of partition %d answers something else: %w", p.number, err)
			}
			return r, nil
		}
		var e *control.Error
		if !errors.As(err, &e) || e.Code != codeElsewhere && e.Code != control.NoAnswer {
			return nil, err
		}
		select {
		case <-time.After(frontAgain):
		case <-ctx.Done():
			return nil, err
		}
	}
}

// look answers the page of another process.
func (d *daemon) look(ctx context.Context, req lookRequest) (any, error) {
	p, err := d.part(req.Partition)
	if err != nil {
		return nil, err
	}
	if req.Question == nil {
		return nil, control.Errorf(control.BadRequest, "the request asks for nothing")
	}
	return page.Answer(ctx, p.here(), req.Question)
}

// Alerts implements page.Part.
func (p *pagePart) Alerts(ctx context.Context, want page.AlertsWanted, after uint64, most int) ([]store.AlertRow, error) {
	return p.now().Alerts(ctx, want, after, most)
}

// Alert implements page.Part.
func (p *pagePart) Alert(ctx context.Context, id string) (store.AlertRow, error) {
	return p.now().Alert(ctx, id)
}

// Refusals implements page.Part.
func (p *pagePart) Refusals(ctx context.Context, most int) (*page.Refusals, error) {
	return p.now().Refusals(ctx, most)
}

// Glances implements page.Part.
func (p *pagePart) Glances(ctx context.Context, first, most int) (*page.Glances, error) {
	return p.now().Glances(ctx, first, most)
}

// See implements page.Part.
func (p *pagePart) See(ctx context.Context, want *page.Sight) (*page.Seen, error) {
	return p.now().See(ctx, want)
}

// newsElsewhere is how often the page looks for what other processes committed.
const newsElsewhere = 2 * time.Second

// tellNews tells the page now and then that something may have been committed
// elsewhere, until ctx ends.
func (d *daemon) tellNews(ctx context.Context) error {
	tick := time.NewTicker(newsElsewhere)
	defer tick.Stop()
	for {
		select {
		case <-tick.C:
			d.page.Committed()
		case <-ctx.Done():
			return nil
		}
	}
}
