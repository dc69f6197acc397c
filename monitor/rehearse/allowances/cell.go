package allowances

import (
	"fmt"
	"strings"
	"time"

	"tailbell/config"
)

// Cell is one row of the table: how events come, and how they are judged.
type Cell struct {
	// Name says in short what is tried.
	Name string
	// Promise is what the allowance promises there.
	Promise Promise
	// Hourly slots are of an hour, else of a day.
	Hourly bool
	// Proportion makes Rate the probability of an event in a trial; else it is
	// the mean of the events in a unit of exposure.
	Proportion bool
	Rate       float64
	// Exposure bounds the exposure (or trials) of a slot, which is drawn evenly
	// between them and reported; zeros leave it to the clock: one a slot.
	Exposure [2]int
	// Factors multiply the rate, or the odds of a proportion, by weekday (7), by
	// hour of the week (168) or by month (12).
	Factors []float64
	// Delay, if any, is by how many slots reports are late, and says so.
	Delay *Delay
	// Late is the share of events that are reported LateBy slots after the
	// monitor looked, which it does not know of; False is how many events that
	// never were are reported for each that was, and taken back as late.
	Late, False float64
	LateBy      int
	// Reference, if any, is what the baseline was estimated from.
	Reference *Reference
	// Closed says that people close every alert a slot after it opened.
	Closed bool
	// Windows are spans in slots, looked at each slot; Trials are windows of the
	// last so many trials of a proportion, looked at when events come.
	Windows []int
	Trials  []int
	// Batch bounds how many trials come at one moment; zeros mean one by one.
	Batch [2]int
	Lower bool
	Upper bool
	// Arrival has events looked at when they come, one by one; Alone, only so.
	Arrival, Alone bool
	// Allowance is as in a set-up; Assurance too. If Shared, it is one for all the
	// series that share an engine.
	Allowance string
	Shared    bool
	Assurance float64
	// Limit, if not 0, is a limit on p from a solver that is not the engine's,
	// and Told how many false alerts a year that solver says it brings.
	Limit, Told float64
	// Series are that many for each seed, each Slots long. Counting begins when
	// the longest window has filled; with Whole it begins with the series.
	Series, Slots int
	Whole         bool
}

// Promise is what is promised of the false alerts of a cell.
type Promise int

// The promises.
const (
	// AtMost: at most the allowance, since the baseline is known, slots are
	// independent and data final.
	AtMost Promise = iota
	// OnAverage: at most the allowance, averaged over what the baseline leaves
	// open.
	OnAverage
	// Assured: at most the allowance on all series but a share of one minus the
	// assurance.
	Assured
	// Nothing: it is shown what happens.
	Nothing
)

// String says it in words.
func (p Promise) String() string {
	switch p {
	case AtMost:
		return "at most"
	case OnAverage:
		return "on average"
	case Assured:
		return "assured"
	case Nothing:
		return "none"
	}
	return "unknown promise"
}

// Delay says which share of a slot's events is known so many slots after its
// end: Reported[i] at an age of i slots.
type Delay struct{ Reported []float64 }

// Reference is a count of Events in Exposure as a baseline. If Drawn, each series
// has a reference of its own, drawn at the rate, in the same exposure; else all
// have the one stated, and each series has a rate of its own, drawn from what that
// reference leaves open: Gamma(M+1, F) for the upper tail, Gamma(M, F) for the
// lower; for a proportion the Beta laws.
type Reference struct {
	Events   int64
	Exposure float64
	Drawn    bool
}

func (c *Cell) slotsPerYear() float64 {
	if c.Hourly {
		return 365.2425 * 24
	}
	return 365.2425
}

func (c *Cell) slot() time.Duration {
	if c.Hourly {
		return time.Hour
	}
	return 24 * time.Hour
}

func (c *Cell) longest() int {
	longest := 0
	for _, w := range c.Windows {
		longest = max(longest, w)
	}
	return max(longest, c.toFill())
}

// reported says that observations carry counts of whole slots.
func (c *Cell) reported() bool { return c.Exposure[1] > 0 }

// setup writes the set-up that judges so many series of the cell, whose own
// references are given if each has one.
func (c *Cell) setup(series int, references []int64) (*config.Setup, error) {
	var b strings.Builder
	line := func(format string, args ...any) { fmt.Fprintf(&b, format+"\n", args...) }
	unit, by := "d", map[int]string{7: "weekday", 168: "hour-of-week", 12: "month"}[len(c.Factors)]
	if c.Hourly {
		unit = "h"
	}
	line(`name = "allowances"`)
	line(`folder = "unused"`)
	line("[time]\nmode = \"history\"\n[limits]\nmemory = \"64GiB\"\nmax_series = %d\n[[indicator]]\nname = \"event\"", series+1)
	line("series = [\"quillmere/*\"]\nunit = \"units\"\nevery = \"1%s\"\nsettle = \"0s\"\nhorizon = \"%d%s\"", unit, 2+c.LateBy+c.lag(), unit)
	line("quiet = 7")
	if c.Proportion {
		line(`measure = "proportion"`)
	}
	if len(c.Trials) > 0 {
		line(`events = "each"`)
	} else if c.reported() {
		line("events = \"counted\"\nexposure = \"reported\"")
	} else {
		line("events = \"each\"\nexposure = \"clock\"\nclock = { size = 1, per = \"1%s\" }", unit)
	}
	if c.False == 0 {
		line(`ids = "none"`)
	}
	line("windows = [%s]", list(c.names(), func(s string) string { return fmt.Sprintf("%q", s) }))
	var tails []string
	if c.Upper {
		tails = append(tails, "upper")
	}
	if c.Lower {
		tails = append(tails, "lower")
	}
	if c.Arrival {
		line("looks = [%s]", list(c.looks(), func(s string) string { return fmt.Sprintf("%q", s) }))
	}
	line("tails = [%s]", list(tails, func(s string) string { return fmt.Sprintf("%q", s) }))
	switch {
	case c.Limit > 0:
		line("p_limit = 0.001")
	default:
		line("allowance = %q", c.Allowance)
		if c.Shared {
			line(`allowance_for = "indicator"`)
		}
		if c.Assurance > 0 {
			line("assurance = %v", c.Assurance)
		}
	}
	for i, m := range references {
		line("[[indicator.baseline]]")
		if i < len(references)-1 {
			line("series = %q", name(i))
		}
		c.reference(line, m)
	}
	if len(references) == 0 {
		line("[indicator.baseline]")
		c.base(line, by, unit)
	}
	setup, err := config.Parse([]byte(b.String()), "allowances")
	if err != nil {
		return nil, fmt.Errorf("cell %q: %w", c.Name, err)
	}
	if c.Limit > 0 { // it may be one that no set-up could state
		setup.Indicators[0].PLimit = c.Limit
	}
	return setup, nil
}

// base writes the baseline that all series share.
func (c *Cell) base(line func(string, ...any), by, unit string) {
	if c.Reference != nil {
		c.reference(line, c.Reference.Events)
	} else {
		line("kind = \"known\"\nrate = %v", c.Rate)
	}
	if len(c.Factors) > 0 {
		line("strata = { by = %q, factors = [%s] }", by, list(c.Factors, func(f float64) string { return fmt.Sprint(f) }))
	}
	if c.Delay != nil {
		ages := make([]string, len(c.Delay.Reported))
		for i := range ages {
			ages[i] = fmt.Sprintf("%q", fmt.Sprint(i, unit))
		}
		line("delay = { ages = [%s], reported = [%s] }", strings.Join(ages, ", "), list(c.Delay.Reported, func(f float64) string { return fmt.Sprint(f) }))
	}
}

func (c *Cell) reference(line func(string, ...any), events int64) {
	line("kind = \"reference\"\nevents = %d\nexposure = %v", events, c.Reference.Exposure)
}

// looks are the ways in which windows are looked at.
func (c *Cell) looks() []string {
	if c.Alone {
		return []string{"arrival"}
	}
	return []string{"slot", "arrival"}
}

// lag is by how many slots a known delay may be late.
func (c *Cell) lag() int {
	if c.Delay == nil {
		return 0
	}
	return len(c.Delay.Reported)
}

func list[T any](items []T, say func(T) string) string {
	said := make([]string, len(items))
	for i, x := range items {
		said[i] = say(x)
	}
	return strings.Join(said, ", ")
}

// name is that of the i-th series.
func name(i int) string { return fmt.Sprintf("quillmere/ward-%d", i) }
