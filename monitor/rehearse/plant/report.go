package plant

import (
	"errors"
	"time"
)

// Report is what a rehearsal came to. Shares lie between 0 and 1, delays are in
// days, bounds at Level.
type Report struct {
	Indicator string `json:"indicator"`
	Title     string `json:"title"`
	// On is "invented" or "real" histories.
	On        string  `json:"on"`
	Series    int     `json:"series"` // in which excesses were planted
	Histories int     `json:"histories"`
	Seed      uint64  `json:"seed"`
	Shape     string  `json:"shape"`
	Length    string  `json:"length"`
	Level     float64 `json:"level"`
	// Setups are the set-ups that were rehearsed, by name and digest.
	Setups []SetupName `json:"setups"`
	// Data names the real history: the SHA-256 of its files.
	Data string `json:"data,omitempty"`
	// How says in words how histories were made.
	How     string   `json:"how"`
	Found   []Found  `json:"found"`
	False   []False  `json:"false_alerts"`
	Predict []Value  `json:"predictive_values,omitempty"`
	Pairs   []Pair   `json:"compared,omitempty"`
	Against []Record `json:"against_known,omitempty"`
	// RefusedPlanted is how many planted observations of a real history came
	// too late to be counted, as the slot's own did.
	RefusedPlanted int64 `json:"refused_planted,omitempty"`
	// Caution stands wherever people act on this.
	Caution string `json:"caution"`
}

// Caution is that of every report.
const Caution = "What is found in rehearsals is found under their assumptions: real rates drift, clump and are reported in ways that no rehearsal holds. " +
	"A signal is a statistical finding: it diagnoses nothing and names no cause. Silence is no proof of safety. Local policy, local codes and licensed practice decide."

// SetupName names a set-up.
type SetupName struct {
	Name   string `json:"name"`
	Digest string `json:"digest"`
	// Limit says in words when its looks signal.
	Limit   string   `json:"limit"`
	Windows []string `json:"windows"`
}

// Share is so many of so many, with exact bounds (Clopper and Pearson 1934).
type Share struct {
	Count int64   `json:"count"`
	Of    int64   `json:"of"`
	Share float64 `json:"share"`
	Lower float64 `json:"lower"`
	Upper float64 `json:"upper"`
}

// Found is how often, and how late, an excess of one ratio was found: by the
// alert, or by one window.
type Found struct {
	Setup int     `json:"setup"` // number in Setups, from 0
	Ratio float64 `json:"ratio"`
	// Window is that whose looks alone are counted, "" for alerts.
	Window string `json:"window,omitempty"`
	InTime Share  `json:"in_time"`
	// Late were found after the end of the excess, Masked when an alert
	// signalled already and none opened; of alerts only.
	Late   int64 `json:"late,omitempty"`
	Masked int64 `json:"masked,omitempty"`
	// ByChance is how often the same would have been seen in the same place
	// without the excess.
	ByChance Share `json:"by_chance"`
	// Delay of those found in time; nil where none was.
	Delay *Delay `json:"delay_days,omitempty"`
}

// Delay says how late, in days since the beginning of the excess.
type Delay struct {
	First  float64 `json:"first_quartile"`
	Median float64 `json:"median"`
	Third  float64 `json:"third_quartile"`
	// Lower and Upper are percentile bounds of the median by the bootstrap
	// over histories; both are the median where fewer than two were found.
	Lower float64 `json:"median_lower"`
	Upper float64 `json:"median_upper"`
	// Half is the time by which half of all excesses were found, those not
	// found counted as never; nil where that many were not.
	Half *float64 `json:"half_of_all,omitempty"`
}

// False is how many false alerts a set-up brings.
type False struct {
	Setup int `json:"setup"`
	// Told is false where they can't be told: the excesses of a real history
	// are not labelled.
	Told   bool    `json:"told"`
	Alerts int64   `json:"alerts"`
	Years  float64 `json:"series_years"`
	// A year and series, with Garwood's bounds.
	Rate  float64 `json:"a_year"`
	Lower float64 `json:"lower"`
	Upper float64 `json:"upper"`
	// Resampled are percentile bounds by the bootstrap over histories: wider
	// than Garwood's where histories differ, as they do if each has its own
	// baseline or its own true rate. Zero where there are none.
	Resampled [2]float64 `json:"resampled,omitzero"`
}

// Value is the predictive value of an alert: the share of alerts that stand for
// an excess, if excesses of one ratio come so often.
type Value struct {
	Setup int     `json:"setup"`
	Ratio float64 `json:"ratio"`
	// Excesses a year and series.
	Frequency float64 `json:"excesses_a_year"`
	// Lower and Upper follow from the bounds of the share found and of the
	// false alerts, each at a level that makes both hold together at Level.
	Value float64 `json:"predictive_value"`
	Lower float64 `json:"lower"`
	Upper float64 `json:"upper"`
}

// Pair compares two set-ups on the same planted histories.
type Pair struct {
	Ratio      float64 `json:"ratio"`
	Both       int64   `json:"both"`
	OnlyFirst  int64   `json:"only_first"`
	OnlySecond int64   `json:"only_second"`
	Neither    int64   `json:"neither"`
	// P is the exact two-sided p (doubled) of so uneven a split of those found
	// by one alone (the binomial test of McNemar 1947); 1 where there are none.
	P float64 `json:"p"`
	// Later is the median of how much later the second finds what both find, in
	// days, with bounds by the bootstrap; nil where nothing is found by both.
	Later *Later `json:"second_later_days,omitempty"`
}

// Later is a median difference of delays.
type Later struct {
	Median float64 `json:"median"`
	Lower  float64 `json:"lower"`
	Upper  float64 `json:"upper"`
}

// Record is how the alerts over a real history compare with what is known of
// it, in the terms of the CDC's guidelines for evaluating surveillance (MMWR
// 2001;50 RR-13): sensitivity, predictive value positive, timeliness.
type Record struct {
	Setup int `json:"setup"`
	// Sensitivity is the share of the known episodes in which an alert opened;
	// Late of these opened after the episode's end. Of is 0 without episodes.
	Sensitivity Share `json:"sensitivity"`
	Late        int64 `json:"late"`
	// Predictive is the share of the alerts that stand for something real:
	// marked real, or not marked and inside a known episode. Undecided alerts
	// are not counted: not marked, and no episodes were given.
	Predictive Share `json:"predictive_value_positive"`
	Undecided  int64 `json:"undecided"`
	// Withdrawn of the alerts that stand for nothing were withdrawn, because
	// data were corrected.
	Withdrawn int64 `json:"withdrawn"`
	// Timeliness is that of the episodes found.
	Timeliness *Delay `json:"timeliness_days,omitempty"`
	// Episodes are the known ones, with the first alert of each.
	Episodes []EpisodeFound `json:"episodes,omitempty"`
}

// EpisodeFound is a known episode, and the first alert in it.
type EpisodeFound struct {
	Series    string    `json:"series"`
	Direction string    `json:"direction"`
	From      time.Time `json:"from"`
	To        time.Time `json:"to"`
	Note      string    `json:"note,omitempty"`
	Found     bool      `json:"found"`
	Late      bool      `json:"late,omitempty"`
	Alert     string    `json:"alert,omitempty"`
	Days      float64   `json:"days,omitempty"`
}

// Check says what makes no sense in a report that was read from somewhere.
func (r *Report) Check() error {
	n := len(r.Setups)
	inside := func(setup int) bool { return setup >= 0 && setup < n }
	for _, f := range r.Found {
		if !inside(f.Setup) {
			return errNoSetup
		}
	}
	for _, f := range r.False {
		if !inside(f.Setup) {
			return errNoSetup
		}
	}
	for _, v := range r.Predict {
		if !inside(v.Setup) {
			return errNoSetup
		}
	}
	for _, a := range r.Against {
		if !inside(a.Setup) {
			return errNoSetup
		}
	}
	return nil
}

var errNoSetup = errors.New("a result is of a set-up that is not listed")
