package main

import (
	"context"
	"encoding/json"
	"errors"
	"fmt"
	"slices"

	"tailbell/config"
	"tailbell/ingest/control"
	"tailbell/ingest/wire"
	"tailbell/monitor/life"
)

// status puts together how all owners are doing.
func (f *front) status(ctx context.Context, body []byte) (any, error) {
	all := &statusReply{Name: f.d.setup.Name, Setup: f.d.setup.Digest, Connected: f.d.bus.Connected(), Troubles: []trouble{}, Partitions: []partStatus{}}
	answers := f.everyone(ctx, verbStatus, body)
	for i, a := range answers {
		var one statusReply
		if a.err == nil {
			a.err = json.Unmarshal(a.Body, &one)
		}
		if a.err != nil && i == 0 {
			return nil, a.err
		}
		if a.err != nil {
			continue // its partitions are missing below
		}
		all.Connected = all.Connected && one.Connected
		all.Troubles = append(all.Troubles, one.Troubles...)
		all.Partitions = append(all.Partitions, one.Partitions...)
	}
	for _, n := range f.missing(answers) {
		text := "nobody owns it at present"
		if owner := f.d.member.keeper.OwnerOf(n); owner != "" {
			text = "the process " + owner + " owns it, but has not answered for it"
		}
		all.Troubles = append(all.Troubles, trouble{Kind: troubleUnowned, Partition: n, Text: text})
	}
	slices.SortFunc(all.Partitions, func(a, b partStatus) int { return a.Number - b.Number })
	return all, nil
}

// act has the owner take an act; one on the series of a pattern is taken by all.
func (f *front) act(ctx context.Context, req actRequest) (any, error) {
	act, reason, detail := wire.NewDecoder(wire.Limits{}).Act(req.Act)
	if reason != "" {
		return nil, control.Errorf(codeRefused, "%s", detail)
	}
	body, err := json.Marshal(req)
	if err != nil {
		return nil, err
	}
	switch {
	case act.Alert != "":
		id, err := json.Marshal(act.Alert)
		if err != nil {
			return nil, err
		}
		found, err := f.first(verbAlert)(ctx, id)
		if err != nil {
			return nil, err
		}
		raw, _ := found.(json.RawMessage) //nolint:errcheck // anything else is no alert, below
		var record life.Record
		if err := json.Unmarshal(raw, &record); err != nil {
			return nil, err
		}
		return f.owner(ctx, f.d.numberOf(record.Series), verbAct, body)
	case !act.Kind.OnSeries() || !config.IsSum(act.Series):
		return f.owner(ctx, f.d.numberOf(act.Series), verbAct, body)
	}
	return f.actOnAll(ctx, body)
}

// actOnAll has every owner take an act on series. It is refused where all refuse
// it.
func (f *front) actOnAll(ctx context.Context, body []byte) (any, error) {
	if n := f.unowned(); n >= 0 {
		return nil, control.Errorf(codeElsewhere, "nobody owns partition %d at present, in which a series may match: try again", n)
	}
	var all seriesActReply
	var refused error
	taken := false
	for _, a := range f.everyone(ctx, verbAct, body) {
		var one seriesActReply
		var why *control.Error
		switch {
		case errors.As(a.err, &why) && why.Code == codeRefused, elsewhere(a.err):
			refused = a.err
			continue
		case a.err != nil:
			return nil, fmt.Errorf("the act may have been taken in a part of the partitions: %w", a.err)
		}
		if err := json.Unmarshal(a.Body, &one); err != nil {
			return nil, err
		}
		taken = true
		all.Series += one.Series
		all.Left = append(all.Left, one.Left...)
	}
	if !taken {
		return nil, refused
	}
	return all, nil
}

// dropOutlet forgets an outlet everywhere.
func (f *front) dropOutlet(ctx context.Context, body []byte) (any, error) {
	var waited uint64
	var last error
	found := false
	for _, a := range f.everyone(ctx, verbDropOutlet, body) {
		var n uint64
		switch {
		case a.err == nil:
			found = true
			if err := json.Unmarshal(a.Body, &n); err != nil {
				return nil, err
			}
			waited += n
		case !elsewhere(a.err):
			return nil, a.err
		default:
			last = a.err
		}
	}
	if !found {
		return nil, last
	}
	return waited, nil
}

// setting tells the set-ups in force everywhere.
func (f *front) setting(ctx context.Context, body []byte) (any, error) {
	answers, err := f.whole(ctx, verbSetting, body)
	if err != nil {
		return nil, err
	}
	var all settingsReply
	for _, a := range answers {
		var one settingsReply
		if err := json.Unmarshal(a.Body, &one); err != nil {
			return nil, err
		}
		all.Settings = append(all.Settings, one.Settings...)
		all.Alerts = append(all.Alerts, one.Alerts...)
		all.More = all.More || one.More
	}
	if len(all.Alerts) > diffAlerts {
		all.Alerts, all.More = all.Alerts[:diffAlerts], true
	}
	for i := range all.Settings { // the first has the text
		if all.Settings[i].Text != nil {
			all.Settings[0], all.Settings[i] = all.Settings[i], all.Settings[0]
			break
		}
	}
	return all, nil
}

// trim has every owner make sure that it can do without what lies up to a
// position, and then removes it.
func (f *front) trim(ctx context.Context, req trimRequest) (any, error) {
	body, err := json.Marshal(req)
	if err != nil {
		return nil, err
	}
	for _, a := range f.everyone(ctx, verbTrim, body) {
		if a.err != nil {
			return nil, a.err
		}
	}
	if n := f.unowned(); n >= 0 {
		return nil, control.Errorf(codeElsewhere, "nobody owns partition %d at present: try again", n)
	}
	return f.d.trimStream(ctx, req)
}
