package replay

import (
	"time"

	"tailbell/config"
	"tailbell/exact"
	"tailbell/monitor"
	"tailbell/monitor/life"
)

// year is the mean Gregorian year, in which alerts are counted.
const year = 365.2425 * 24 * float64(time.Hour)

// Watch is what a replay came to for one indicator.
type Watch struct {
	Indicator string `json:"indicator"`
	// Series were looked at, in Looks that were made and Withheld ones that
	// could not be.
	Series   int   `json:"series"`
	Looks    int64 `json:"looks"`
	Withheld int64 `json:"withheld"`
	// Alerts were opened, Late of them by data that came after the look, and
	// Withdrawn when the data were corrected.
	Alerts    int `json:"alerts"`
	Late      int `json:"late"`
	Withdrawn int `json:"withdrawn"`
	// Years is how long the indicator was looked at, SeriesYears the sum of
	// that over its series: from the first look made to the last, and a slot.
	Years       float64 `json:"years"`
	SeriesYears float64 `json:"series_years"`
	// AYear is how many alerts there were a year, ASeriesYear a year of one
	// series.
	AYear       PerYear `json:"alerts_a_year"`
	ASeriesYear PerYear `json:"alerts_a_series_year"`
}

// PerYear is a number of events a year with Garwood's exact bounds; all nil
// without any time.
type PerYear struct {
	Rate  *float64 `json:"rate"`
	Lower *float64 `json:"lower"`
	Upper *float64 `json:"upper"`
}

// RateOf returns n events in so many years with exact bounds at level 1-alpha
// (Garwood 1936).
func RateOf(n int64, years, alpha float64) PerYear {
	if years <= 0 {
		return PerYear{}
	}
	lower, upper := exact.Garwood(n, alpha)
	rate := float64(n) / years
	lower, upper = lower/years, upper/years
	return PerYear{&rate, &lower, &upper}
}

// Watches returns what the replay came to for each indicator of the set-up,
// with bounds at level 1-alpha.
func (r *Result) Watches(setup *config.Setup, alpha float64) []Watch {
	var list []Watch
	for i := range setup.Indicators {
		list = append(list, r.watchOf(&setup.Indicators[i], alpha))
	}
	return list
}

func (r *Result) watchOf(in *config.Indicator, alpha float64) Watch {
	w := Watch{Indicator: in.Name}
	var whole, own stretch
	series := ""
	end := func() {
		if series != "" {
			w.SeriesYears += own.years(in)
		}
	}
	for i := range r.Watched {
		x := &r.Watched[i]
		if x.Indicator != in.Name {
			continue
		}
		if x.Series != series {
			end()
			series, own = x.Series, stretch{}
			w.Series++
		}
		w.Looks += x.Looks
		w.Withheld += x.Withheld
		if x.Looks > 0 {
			whole.reach(x.First, x.Last)
			own.reach(x.First, x.Last)
		}
	}
	end()
	w.Years = whole.years(in)
	for i := range r.Steps {
		n := &r.Steps[i]
		switch {
		case n.Record.Indicator != in.Name:
		case n.Step.Kind == life.StepOpened:
			w.Alerts++
			if n.Record.Late {
				w.Late++
			}
		case n.Step.Kind == life.StepWithdrawn:
			w.Withdrawn++
		}
	}
	w.AYear = RateOf(int64(w.Alerts), w.Years, alpha)
	w.ASeriesYear = RateOf(int64(w.Alerts), w.SeriesYears, alpha)
	return w
}

// stretch is from the first look to the last.
type stretch struct {
	first, last monitor.Instant
	any         bool
}

func (s *stretch) reach(first, last monitor.Instant) {
	if !s.any {
		*s = stretch{first, last, true}
	}
	s.first, s.last = min(s.first, first), max(s.last, last)
}

// years adds a slot: the first look stands for one too.
func (s *stretch) years(in *config.Indicator) float64 {
	if !s.any {
		return 0
	}
	cal := monitor.NewCalendar(in.Every, in.Zone)
	at := s.last.Add(-in.Settle)
	slot := cal.Start(cal.Slot(at)+1) - cal.Start(cal.Slot(at))
	return float64(s.last-s.first+slot) * float64(time.Microsecond) / year
}
