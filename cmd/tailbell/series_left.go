package main

import (
	"fmt"
	"slices"
	"strings"

	"tailbell/alert/words"
	"tailbell/config"
	"tailbell/monitor/life"
	"tailbell/monitor/store"
)

// leftAlert is an alert that signalled no more after an act on series.
type leftAlert struct {
	ID     string        `json:"id"`
	Series string        `json:"series"`
	How    life.StepKind `json:"how"`
}

// mostLeft is how many alerts an act looks after in one partition.
const mostLeft = 1000

// notLeft lists the alerts of what matches that have not left.
func notLeft(st *store.Store, pattern string) ([]string, error) {
	rows, err := st.Alerts(store.AlertFilter{NotDone: true, SeriesLike: config.NewPattern(pattern).Match}, 0, mostLeft)
	if err != nil {
		return nil, err
	}
	var ids []string
	for i := range rows {
		if r := &rows[i].Record; !r.Left() {
			ids = append(ids, r.ID)
		}
	}
	return ids, nil
}

// leftOf says which of the alerts have left by now.
func leftOf(st *store.Store, ids []string) ([]leftAlert, error) {
	var left []leftAlert
	for _, id := range ids {
		row, err := st.Alert(id)
		if err != nil {
			return nil, err
		}
		r := &row.Record
		for _, how := range []life.StepKind{life.StepReturned, life.StepWithdrawn, life.StepClosed} {
			if slices.ContainsFunc(r.Steps, func(s life.Step) bool { return s.Kind == how && (how != life.StepClosed || s.By == "") }) {
				left = append(left, leftAlert{r.ID, r.Series, how})
				break
			}
		}
	}
	return left, nil
}

// toldLeft says which alerts left with an act, "" for none.
func toldLeft(left []leftAlert) string {
	const most = 10
	var b strings.Builder
	for i := range left {
		if i == most {
			fmt.Fprintf(&b, "; and %s more", words.Amount(int64(len(left)-most), "alerts"))
			break
		}
		how := map[life.StepKind]string{life.StepReturned: "has returned", life.StepWithdrawn: "is withdrawn", life.StepClosed: "is closed"}[left[i].How]
		fmt.Fprintf(&b, "; alert %s of %s %s with it", left[i].ID, left[i].Series, how)
	}
	return b.String()
}
