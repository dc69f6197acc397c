package page

import (
	"context"
	"fmt"
	"net/http"
	"net/url"
	"slices"
	"strconv"
	"strings"

	"tailbell/alert/words"
	"tailbell/monitor/life"
	"tailbell/monitor/store"
)

// recordRows is how many alerts one list of the record shows.
const recordRows = 50

// recordData is the record: all alerts, the newest first.
type recordData struct {
	Rows      []entry
	After     string
	Condition life.Condition
	Choices   []choice
	First     bool
}

// record shows all alerts that ever were, the newest first.
func (p *Page) record(r *http.Request) (*screen, error) {
	asked := r.URL.Query()
	d := &recordData{Condition: life.Condition(asked.Get("condition"))}
	d.Choices = append(d.Choices, choice{"all", "/alerts", d.Condition == ""})
	filter := AlertsWanted{NewestFirst: true}
	known := d.Condition == ""
	for _, c := range conditions {
		d.Choices = append(d.Choices, choice{string(c), "/alerts?" + url.Values{"condition": {string(c)}}.Encode(), c == d.Condition})
		known = known || c == d.Condition
	}
	if !known {
		return nil, &problem{http.StatusBadRequest, "There is no such condition.", "The record shows all alerts."}
	}
	if d.Condition != "" {
		filter.Conditions = []life.Condition{d.Condition}
		filter.NotDone = d.Condition != life.Closed && d.Condition != life.Withdrawn
	}
	before, err := readPlaces(asked.Get("before"), len(p.o.Parts))
	if err != nil {
		return nil, &problem{http.StatusBadRequest, "That place in the record can't be read.", "Begin at the newest alert."}
	}
	d.First = asked.Get("before") == ""
	rows, places, more, err := p.newestAlerts(r.Context(), filter, before)
	if err != nil {
		return nil, err
	}
	for i := range rows {
		d.Rows = append(d.Rows, entry{Record: &rows[i], Sentence: words.Brief(&rows[i], &rows[i].Worst), Latest: latestStep(&rows[i])})
	}
	if more {
		v := url.Values{"before": {places}}
		if d.Condition != "" {
			v.Set("condition", string(d.Condition))
		}
		d.After = "/alerts?" + v.Encode()
	}
	return &screen{name: "record", Title: "The record of alerts", Here: "/alerts", Data: d}, nil
}

// conditions are those that the record can be asked for.
var conditions = []life.Condition{life.Unacknowledged, life.Acknowledged, life.Returned, life.Shelved, life.Closed, life.Withdrawn}

// newestAlerts merges the newest alerts of all partitions, before a place in
// each.
func (p *Page) newestAlerts(ctx context.Context, filter AlertsWanted, before []uint64) (records []life.Record, places string, more bool, err error) {
	type place struct {
		part int
		row  store.AlertRow
	}
	var all []place
	for i := range p.o.Parts {
		if before[i] == 1 {
			continue // its oldest was shown
		}
		rows, err := p.o.Parts[i].Alerts(ctx, filter, before[i], recordRows+1)
		if err != nil {
			return nil, "", false, err
		}
		for _, row := range rows {
			all = append(all, place{i, row})
		}
	}
	slices.SortStableFunc(all, func(a, b place) int { return b.row.Record.OpenedAt().Compare(a.row.Record.OpenedAt()) })
	more = len(all) > recordRows
	for _, one := range all[:min(len(all), recordRows)] {
		records = append(records, one.row.Record)
		if n := one.row.Number; before[one.part] == 0 || n < before[one.part] {
			before[one.part] = n
		}
	}
	texts := make([]string, len(before))
	for i, n := range before {
		texts[i] = strconv.FormatUint(n, 10)
	}
	return records, strings.Join(texts, "."), more, nil
}

// readPlaces reads the places in the partitions' records, 0 for the newest.
func readPlaces(text string, parts int) ([]uint64, error) {
	places := make([]uint64, parts)
	if text == "" {
		return places, nil
	}
	texts := strings.Split(text, ".")
	if len(texts) != parts {
		return nil, fmt.Errorf("%d places for %d partitions", len(texts), parts)
	}
	for i, t := range texts {
		n, err := strconv.ParseUint(t, 10, 64)
		if err != nil {
			return nil, err
		}
		places[i] = n
	}
	return places, nil
}
