package estimate

import (
	"context"
	"fmt"
	"slices"
	"time"

	"tailbell/config"
	"tailbell/exact/resample"
	"tailbell/monitor"
)

// Part is a recurring part of the calendar.
type Part int

// The parts, as they are written in strata.
const (
	Weekday Part = iota
	Month
	HourOfWeek
)

func (p Part) String() string {
	switch p {
	case Weekday:
		return "weekday"
	case Month:
		return "month"
	case HourOfWeek:
		return "hour-of-week"
	}
	return fmt.Sprintf("Part(%d)", int(p))
}

// MarshalText writes what String does.
func (p Part) MarshalText() ([]byte, error) { return []byte(p.String()), nil }

func (p Part) size() int {
	switch p {
	case Weekday:
		return 7
	case Month:
		return 12
	case HourOfWeek:
		return 168
	}
	return 0
}

// of returns the part's number of a moment: weekdays from Monday, hours from
// Monday's first.
func (p Part) of(t time.Time) int {
	weekday := (int(t.Weekday()) + 6) % 7
	switch p {
	case Weekday:
		return weekday
	case Month:
		return int(t.Month()) - 1
	case HourOfWeek:
		return 24*weekday + t.Hour()
	}
	return 0
}

// Label names the i-th of a part.
func (p Part) Label(i int) string {
	days := [...]string{"Monday", "Tuesday", "Wednesday", "Thursday", "Friday", "Saturday", "Sunday"}
	switch p {
	case Weekday:
		return days[i]
	case Month:
		return time.Month(i + 1).String()
	case HourOfWeek:
		return fmt.Sprintf("%s %02d:00", days[i/24][:3], i%24)
	}
	return ""
}

// Stratum is one weekday, month or hour of the week.
type Stratum struct {
	Label  string `json:"label"`
	Events int64  `json:"events"`
	// Expected if each series kept one rate; Factor is events over expected,
	// 1 where nothing is expected.
	Expected float64 `json:"expected"`
	Factor   float64 `json:"factor"`
}

// Effect is how the rate differs between the parts of the calendar.
type Effect struct {
	By     Part      `json:"by"`
	Strata []Stratum `json:"strata"`
	// Cycles is how many weeks or years the history spans.
	Cycles float64 `json:"cycles"`
	Chance PValue  `json:"chance"`
}

// parts returns the parts of the calendar that slots of this length tell apart.
func parts(every config.Every) []Part {
	switch every.Unit {
	case config.Minute, config.Hour:
		return []Part{Weekday, HourOfWeek, Month}
	case config.Day:
		return []Part{Weekday, Month}
	case config.Week:
		return []Part{Month}
	case config.Month:
		if every.N == 1 {
			return []Part{Month}
		}
	case config.Year:
	}
	return nil
}

// effect tests whether the parts differ, each series keeping its total.
func (h *History) effect(ctx context.Context, by Part, plan resample.Plan) (Effect, error) {
	e := Effect{By: by, Cycles: h.years()}
	if by != Month {
		e.Cycles *= 365.25 / 7
	}
	var strata []stratum
	for i := range h.Series {
		var s stratum
		for _, slot := range h.Series[i].Slots {
			s.events = append(s.events, slot.Events)
			s.exposure = append(s.exposure, slot.Exposure)
			s.group = append(s.group, by.of(slot.Start.Time().In(h.Indicator.Zone)))
		}
		strata = append(strata, s)
	}
	t := newTable(h.proportion(), by.size(), strata)
	for g := range by.size() {
		s := Stratum{Label: by.Label(g), Events: t.observed[g], Expected: t.expected[g], Factor: 1}
		if s.Expected > 0 {
			s.Factor = float64(s.Events) / s.Expected
		}
		e.Strata = append(e.Strata, s)
	}
	var err error
	e.Chance, err = t.test(ctx, plan)
	return e, err
}

func (h *History) proportion() bool { return h.Indicator.Measure == config.Proportion }

func (h *History) years() float64 {
	return h.To.Time().Sub(h.From.Time()).Hours() / (24 * 365.25)
}

// ladder returns the lengths, in slots, at which spread is worked out.
func ladder(in *config.Indicator) []int {
	var slots []int
	switch in.Every.Unit {
	case config.Minute, config.Hour:
		hour := 1
		if in.Every.Unit == config.Minute {
			hour = 60 / in.Every.N
		}
		slots = []int{1, hour, 24 * hour, 168 * hour, 672 * hour}
	case config.Day:
		slots = []int{1, 7, 28, 91, 364}
	case config.Week:
		slots = []int{1, 4, 13, 52}
	case config.Month:
		slots = []int{1, 3, 12}
		if in.Every.N == 3 {
			slots = []int{1, 4}
		}
	case config.Year:
		slots = []int{1, 2, 5, 10}
	}
	for _, w := range spans(in) {
		slots = append(slots, w.Slots)
	}
	return slots
}

// spans returns the windows that are spans of time. Those of the last so many
// trials have no length in slots, so nothing is said of them.
func spans(in *config.Indicator) []config.Window {
	return slices.DeleteFunc(slices.Clone(in.Windows), func(w config.Window) bool { return w.Trials > 0 })
}

// lengthOf writes a number of slots as a span.
func lengthOf(in *config.Indicator, slots int) string {
	e := in.Every
	n := slots * e.N
	switch {
	case e.Unit == config.Minute && n%1440 == 0:
		e.Unit, n = config.Day, n/1440
	case e.Unit == config.Minute && n%60 == 0:
		e.Unit, n = config.Hour, n/60
	case e.Unit == config.Hour && n%24 == 0 && n > 24:
		e.Unit, n = config.Day, n/24
	case e.Unit == config.Month && n%12 == 0:
		e.Unit, n = config.Year, n/12
	}
	e.N = n
	return e.String()
}

// periodOf returns the shortest length, a slot or longer, that divides the
// history into no more than maxPeriods periods.
func periodOf(in *config.Indicator, from, to monitor.Instant) config.Every {
	const maxPeriods = 60
	all := []config.Every{
		in.Every,
		{N: 1, Unit: config.Hour},
		{N: 1, Unit: config.Day},
		{N: 1, Unit: config.Week},
		{N: 1, Unit: config.Month},
		{N: 3, Unit: config.Month},
		{N: 1, Unit: config.Year},
	}
	for _, e := range all {
		coarser := e.Unit > in.Every.Unit || e == in.Every || (e.Unit == in.Every.Unit && e.N > in.Every.N)
		if !coarser {
			continue
		}
		cal := monitor.NewCalendar(e, in.Zone)
		if cal.Slot(to-1)-cal.Slot(from) < maxPeriods {
			return e
		}
	}
	return all[len(all)-1]
}
