package main

import (
	"context"
	"encoding/json"
	"fmt"
	"slices"
	"strings"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/control"
	"tailbell/monitor"
)

// seriesRequest asks for the series of a partition that match a pattern, among
// the next ones from a number on.
type seriesRequest struct {
	Partition int    `json:"partition"`
	Pattern   string `json:"pattern"`
	From      int    `json:"from"`
	// Retired asks for those that are monitored no longer instead.
	Retired bool `json:"retired,omitempty"`
}

// seriesReply gives them, and where to go on: -1 at the end.
type seriesReply struct {
	Series []monitor.Listed `json:"series"`
	Next   int              `json:"next"`
}

// seriesSlice is how many series are looked through for one reply.
const seriesSlice = 1000

func (d *daemon) series(ctx context.Context, req seriesRequest) (any, error) {
	p, err := d.part(req.Partition)
	if err != nil {
		return nil, err
	}
	if err := config.CheckPattern(req.Pattern); err != nil {
		return nil, control.Errorf(control.BadRequest, "%q: %v", req.Pattern, err)
	}
	var r seriesReply
	if req.From < 0 {
		return nil, control.Errorf(control.BadRequest, "series are numbered from 0, not from %d", req.From)
	}
	err = p.do(ctx, func(e *monitor.Engine) {
		list := e.List
		if req.Retired {
			list = e.Ended
		}
		r.Series, r.Next = list(config.NewPattern(req.Pattern), req.From, seriesSlice)
	})
	return r, err
}

// seriesActReply says for how many series an act holds by now, and which alerts
// left with it.
type seriesActReply struct {
	Series int         `json:"series"`
	Left   []leftAlert `json:"left,omitempty"`
}

// actOnSeries publishes an act to every partition in which a series may match.
// It is refused where all of them refuse it.
func (d *daemon) actOnSeries(ctx context.Context, act *monitor.Act, data json.RawMessage) (any, error) {
	parts := d.parts.all()
	if lead := strings.Split(act.Series, "/"); !slices.ContainsFunc(lead[:min(d.setup.KeyParts, len(lead))], config.IsSum) {
		p, err := d.partOf(act.Series)
		if err != nil {
			return nil, err
		}
		parts = []*part{p}
	}
	if act.Kind == monitor.Reset { // no matter of partitions that never heard of them
		if some, err := partsMatching(ctx, parts, act.Series); err != nil {
			return nil, err
		} else if len(some) > 0 {
			parts = some
		}
	}
	var r seriesActReply
	refused := ""
	taken := false
	for _, p := range parts {
		lit, err := notLeft(p.store, act.Series)
		if err != nil {
			return nil, err
		}
		why, err := d.publishAct(ctx, p, data)
		if err != nil {
			return nil, err
		}
		if why != "" {
			refused = why
			continue
		}
		taken = true
		if err := p.do(ctx, func(e *monitor.Engine) { r.Series += e.Matching(act.Series) }); err != nil {
			return nil, err
		}
		left, err := leftOf(p.store, lit)
		if err != nil {
			return nil, err
		}
		r.Left = append(r.Left, left...)
	}
	if !taken {
		return nil, control.Errorf(codeRefused, "%s", refused)
	}
	return r, nil
}

// partsMatching returns the partitions in which a series matches.
func partsMatching(ctx context.Context, parts []*part, pattern string) (some []*part, err error) {
	for _, p := range parts {
		n := 0
		if err := p.do(ctx, func(e *monitor.Engine) { n = e.Matching(pattern) }); err != nil {
			return nil, err
		}
		if n > 0 {
			some = append(some, p)
		}
	}
	return some, nil
}

// publishAct publishes an act, waits until it is committed, and says why it was
// refused; "" if it was taken.
func (d *daemon) publishAct(ctx context.Context, p *part, data json.RawMessage) (string, error) {
	position, err := d.bus.Publish(ctx, bus.Outgoing{Partition: p.number, Kind: bus.Act, Data: data})
	if err != nil {
		return "", err
	}
	if err := p.reach(ctx, position); err != nil {
		return "", fmt.Errorf("the act is in the stream at position %d, but was not taken in time: %w", position, err)
	}
	return refusedAt(p.store, position)
}
