package main

import (
	"io"
	"maps"
	"slices"
	"strings"

	"tailbell/config"
	"tailbell/ingest/divide"
)

// divisionReply is what a division did.
type divisionReply struct {
	From     int             `json:"from"`
	Into     int             `json:"into"`
	Before   uint64          `json:"last_position_before"`
	Read     int             `json:"messages_read"`
	Carried  int             `json:"messages_carried_over"`
	Elements int64           `json:"elements"`
	Events   int64           `json:"events"`
	Readings int64           `json:"readings,omitempty"`
	Refused  int64           `json:"not_understood"`
	LeftOut  int             `json:"left_out"`
	Series   []dividedSeries `json:"series"`
	Alerts   *divide.Alerts  `json:"alerts"`
}

type dividedSeries struct {
	Series    string `json:"series"`
	Partition int    `json:"partition"`
	Elements  int64  `json:"elements"`
	Events    int64  `json:"events"`
	// Exposure is its sum, that of readings' totals included.
	Exposure string `json:"exposure"`
	// Readings are those of counters, and Totals the sum of their events' totals.
	Readings int64  `json:"readings,omitempty"`
	Totals   string `json:"totals,omitempty"`
}

func (v *division) reply() *divisionReply {
	t := v.result.Before
	r := &divisionReply{
		From: v.setup.Partitions, Into: v.next.Partitions, Before: v.move.Before(), Read: v.result.Read, Carried: v.result.Carried,
		Elements: t.Elements, Events: t.Events, Readings: t.Readings, LeftOut: v.result.LeftOut, Series: []dividedSeries{}, Alerts: v.alerts,
	}
	for _, n := range t.Refused {
		r.Refused += n
	}
	for _, name := range slices.Sorted(maps.Keys(t.Series)) {
		s := t.Series[name]
		one := dividedSeries{
			Series: name, Partition: config.PartitionOf(name, v.setup.KeyParts, v.next.Partitions),
			Elements: s.Elements, Events: s.Events, Exposure: s.Exposure(),
		}
		if s.Readings > 0 {
			one.Readings, one.Totals = s.Readings, s.Totals()
		}
		r.Series = append(r.Series, one)
	}
	return r
}

// tell prints the account before and after.
func (v *division) tell(w io.Writer) error {
	r := v.reply()
	if v.options.asJSON {
		return writeJSON(w, r)
	}
	if err := say(w, "%s: %s into %d. Read %s up to position %d, carried over %s.", v.setup.Name,
		amount(v.setup.Partitions, "partitions"), v.next.Partitions, amount(r.Read, "messages"), r.Before, amount(r.Carried, "messages")); err != nil {
		return err
	}
	const mostSeries = 40
	for i, s := range r.Series {
		if i == mostSeries {
			if err := say(w, "  and %s more (--json tells them all)", amount(len(r.Series)-i, "series")); err != nil {
				return err
			}
			break
		}
		if err := say(w, "  %s: %s before and after, %s, partition %d", s.Series, amount(s.Elements, "elements"),
			s.counts(), s.Partition); err != nil {
			return err
		}
	}
	readings := ""
	if r.Readings > 0 {
		readings = " and " + amount(r.Readings, "readings") + " of counters"
	}
	if err := say(w, "%s with %s%s balance, series by series; %s can't be understood, before and after.",
		amount(r.Elements, "elements"), amount(r.Events, "events"), readings, amount(r.Refused, "elements")); err != nil {
		return err
	}
	if r.LeftOut > 0 {
		if err := say(w, "%s that had come to the wrong partition, and %s refused, %s left out.",
			amount(r.LeftOut, "elements"), wasWere(r.LeftOut), wasWere(r.LeftOut)); err != nil {
			return err
		}
	}
	return tellAlerts(w, r.Alerts)
}

// counts says what the elements of a series add up to. Totals of counters do not
// add up to events.
func (s *dividedSeries) counts() string {
	switch {
	case s.Readings == 0:
		return amount(s.Events, "events") + " in " + s.Exposure
	case s.Events == 0:
		return "totals of counters"
	}
	return amount(s.Events, "events") + " beside totals of counters"
}

func tellAlerts(w io.Writer, a *divide.Alerts) error {
	if err := say(w, "Alerts: %d before, %d after; %d equal to the byte, %d but for what an allowance amounts to over all series.",
		a.Old, a.New, a.Same, a.Alike); err != nil {
		return err
	}
	if len(a.Lost) > 0 {
		if err := say(w, "Not there any more: %s.", strings.Join(a.Lost, ", ")); err != nil {
			return err
		}
	}
	if len(a.Differing) > 0 {
		return say(w, "Otherwise different: %s, %d more.", strings.Join(a.Differing, ", "), a.MoreDiffering)
	}
	return nil
}
