// Package report writes what a monitor saw over a history as one file: HTML
// that needs nothing from outside, or the same as Markdown.
//
// # Model
//
// A Recorder listens to an engine while a history passes through it, and gathers
// a Report: plain data, with the pictures of package figure. HTML and Markdown
// write it. The same history, set-up and program give the same bytes; no wall
// time is in a report, unless one is given.
//
// # Caveats
//
// Pictures show each look as the data stood when they could change no more, or
// stand at the end; whether it could be made when it fell due is told in numbers. A picture of very many
// looks keeps, of each stretch, the one with the smallest p. Whatever comes from
// outside (names, reasons, sources) is escaped: it can neither be markup nor a link.
//
// A signal is a statistical finding: it diagnoses nothing and names no cause.
package report

import (
	"strings"
	"time"

	"tailbell/alert/figure"
	"tailbell/alert/words"
	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/estimate"
	"tailbell/monitor/life"
	"tailbell/monitor/rehearse/plant"
)

// Report is everything that is told.
type Report struct {
	Title string
	// Program is the program's version; Setup the set-up and SetupDigest its
	// digest; Data is the digest of the data, Files their names.
	Program string
	Setup   *config.Setup
	Data    string
	Files   []string
	// Made is when the report was made; zero leaves it out.
	Made time.Time
	// From and To bound the looks.
	From, To time.Time
	// Rows were read, of which so many Faults could not be used.
	Rows, Faults int
	// Unused are the rows of which nothing was counted: those Faults, and what
	// the engine refused.
	Unused     []Unused
	Account    monitor.Account
	Conditions []Condition
	Indicators []*Indicator
	Rehearsals []*plant.Report
	// Begins says, of a store, from when on it has slots; "" where it has all.
	Begins string
	// Remake is the command line that makes the report again.
	Remake string
}

// Unused is a row that was not counted, and why. Place is its file and line.
type Unused struct{ Place, Reason, Detail string }

// Condition is something that kept looks from being made at the end.
type Condition struct{ Series, Text, Since string }

// Indicator is one stanza of the set-up and what came of it.
type Indicator struct {
	Cfg *config.Indicator
	// How says in sentences how it was monitored.
	How []string
	// Looks could be made in the end, Withheld not even then for lack of data.
	Looks, Withheld int64
	Baselines       []Baseline
	// Estimate is what the history itself says of the usual rate; nil for none.
	Estimate *estimate.Report
	Funnel   *figure.Funnel // nil for fewer than two series
	Alerts   []Alert
	Series   []*Series
	// LeftOut series have no pictures, for brevity.
	LeftOut int
}

// Baseline is one baseline as the set-up states it.
type Baseline struct {
	Series, Kind, Rate, Bounds, From, Source string
}

// Alert is one alert with its picture.
type Alert struct {
	life.Record
	Picture *Picture // nil where there were too few looks
}

// Picture is a picture of so many Looks, of which it may show fewer.
type Picture struct {
	figure.Series
	Looks int
	// Note, if not "", is said beside it.
	Note string
}

// Caption says in words what the picture shows.
func (p *Picture) Caption() string {
	text := p.Describe()
	if p.Looks > len(p.Points) {
		text += " Of " + words.Amount(int64(p.Looks), "looks") + " that many are drawn: of each stretch the one with the smallest p."
	}
	return strings.TrimSpace(text + " " + p.Note)
}

// Series is one series with a picture for each window.
type Series struct {
	Name string
	// Events in Exposure (an exact decimal) over slots known on both sides,
	// and the rate with its exact bounds.
	Events             int64
	Exposure           string
	Rate, Lower, Upper float64
	Missing            int
	Alerts             int
	Pictures           []*Picture
}

// Counts say what the alerts of an indicator were.
type Counts struct{ Upper, Lower, Real, Chance, Data, Redefined, Unmarked, Withdrawn int }

// Counts counts the alerts by direction and mark.
func (in *Indicator) Counts() Counts {
	var c Counts
	for i := range in.Alerts {
		a := &in.Alerts[i]
		if a.Direction == life.Lower {
			c.Lower++
		} else {
			c.Upper++
		}
		if a.Condition == life.Withdrawn {
			c.Withdrawn++
		}
		switch a.Mark {
		case life.MarkReal:
			c.Real++
		case life.MarkChance:
			c.Chance++
		case life.MarkData:
			c.Data++
		case life.MarkRedefine:
			c.Redefined++
		case life.NotMarked:
			c.Unmarked++
		}
	}
	return c
}

// Caution stands at the beginning and at the end of every report.
const Caution = "A signal is a statistical finding: it is not a diagnosis and not a cause. Silence is no proof of safety. " +
	"Local policy, local codes and licensed practice decide what is done."
