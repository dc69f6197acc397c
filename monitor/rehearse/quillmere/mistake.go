package quillmere

import (
	"fmt"
	"time"

	"tailbell/monitor/rehearse"
)

// mistakes writes the errors that look like an excess until they are mended.
func (a *author) mistakes() {
	east, north, quay := sites[0], sites[1], sites[2]
	a.practice(north, north.wards[3], "2025-02-10", "2025-03-07")
	a.practice(east, east.wards[2], "2025-10-06", "2025-10-31")
	a.mistyped(east, "ward-1", "line-infection", "2024-02-20", "2024-03-08", 12)
	a.mistyped(north, "ward-4", "line-infection", "2025-05-13", "2025-05-30", 13)
	a.mistyped(quay, "stroke-unit", "line-infection", "2025-09-16", "2025-10-02", 11)
	a.mistyped(east, "theatre-b", "wound-infection", "2024-11-18", "2024-12-20", 24)
	a.mistyped(quay, "theatre-e", "wound-infection", "2025-08-04", "2025-09-05", 26)
	for i := range a.plan.misfilings {
		a.plan.mistakes = append(a.plan.mistakes, a.plan.misfilings[i].mistake())
	}
	for i := range a.plan.units {
		a.plan.mistakes = append(a.plan.mistakes, a.plan.units[i].mistake())
	}
}

func (a *author) mistake(series string, d rehearse.Direction, from, to, mended time.Time, what string) {
	a.plan.mistakes = append(a.plan.mistakes, rehearse.Mistake{Series: series, Direction: d, From: from, To: to, Mended: mended, What: what})
}

// misfiling is a time in which all falls of a site were entered under one
// ward; they are moved by one message each.
type misfiling struct {
	site, ward       string
	from, to, mended time.Time
}

// misfilings are known before the wards are written, since they concern what
// the wards send in any case.
func (a *author) misfilings() []misfiling {
	return []misfiling{
		{"quillmere-east", "intensive-care", a.when("2024-07-15"), a.when("2024-08-19"), a.when("2024-08-30")},
		{"quillmere-quay", "ward-8", a.when("2025-09-08"), a.when("2025-10-13"), a.when("2025-10-24")},
	}
}

// misfiling returns the one that holds a ward's fall, or nil.
func (p *plan) misfiling(site, ward string, t time.Time) *misfiling {
	for i := range p.misfilings {
		m := &p.misfilings[i]
		if m.site == site && m.ward != ward && !t.Before(m.from) && t.Before(m.to) {
			return m
		}
	}
	return nil
}

func (m *misfiling) series() string { return seriesOf(m.site, m.ward, "fall") }

func (m *misfiling) mistake() rehearse.Mistake {
	return rehearse.Mistake{
		Series: m.series(), Direction: rehearse.Upper, From: m.from, To: m.to, Mended: m.mended,
		What: "falls of other wards entered under this one, moved later",
	}
}

// practice enters falls that never were, in the live form; they are retracted.
func (a *author) practice(s site, w ward, from, mended string) {
	series := seriesOf(s.name, w.name, "fall")
	start, end := a.when(from), a.when(mended)
	for n := range 14 {
		at := start.AddDate(0, 0, n/5).Add(time.Duration(10*60+11*n) * time.Minute)
		e := rehearse.Element{
			Series: series, ID: fmt.Sprintf("fall-%s-x%s-%02d", w.name, compact(start), n), Revision: 1,
			Start: at, End: at, Events: 1, HasEvents: true,
		}
		y, m, d := at.Date()
		a.sendThenRevise(s, e, time.Date(y, m, d+1, 0, 0, 0, 0, a.zone), end, retraction)
	}
	a.mistake(series, rehearse.Upper, start, start.AddDate(0, 0, 3), end, "entries made for practice in the live form, retracted later")
}

// mistyped sends, beside the count of a slot, another one of so many events
// that were none, and corrects it to 0.
func (a *author) mistyped(s site, unit, last, from, mended string, added int64) {
	series := seriesOf(s.name, unit, last)
	start, end := a.when(from), a.when(from).AddDate(0, 0, 1)
	if last == "wound-infection" {
		end = start.AddDate(0, 0, 7)
	}
	e := rehearse.Element{
		Series: series, ID: "extra-" + unit + "-" + compact(start), Revision: 1,
		Start: start, End: end, Events: added, HasEvents: true,
	}
	a.sendThenRevise(s, e, end.AddDate(0, 0, 1), a.when(mended), func(e *rehearse.Element) { e.Events = 0 })
	a.mistake(series, rehearse.Upper, start, end, a.when(mended), fmt.Sprintf("%d events typed where there were none, corrected to 0 later", added))
}

// unitError is a span of bed-days sent as so many hundredths of what they are,
// and mended by a second revision of each.
type unitError struct {
	series           string
	from, to, mended time.Time
	hundredths       int64
}

// unitErrors are known before the wards are written, since they concern what
// the wards send in any case.
func (a *author) unitErrors() []unitError {
	return []unitError{
		{"quillmere-north/ward-6/fall", a.when("2024-08-05"), a.when("2024-09-09"), a.when("2024-09-24"), 1},
		{"quillmere-east/ward-3/fall", a.when("2024-10-07"), a.when("2024-11-11"), a.when("2024-11-29"), 1000},
		{"quillmere-quay/ward-7/fall", a.when("2024-02-05"), a.when("2024-03-11"), a.when("2024-03-29"), 1000},
	}
}

func (p *plan) unitError(series string, t time.Time) *unitError {
	for i := range p.units {
		u := &p.units[i]
		if u.series == series && !t.Before(u.from) && t.Before(u.to) {
			return u
		}
	}
	return nil
}

func (u *unitError) mistake() rehearse.Mistake {
	d, what := rehearse.Upper, "bed-days sent in hundreds, corrected later"
	if u.hundredths > 100 {
		d, what = rehearse.Lower, "bed-days sent ten times too large, corrected later"
	}
	return rehearse.Mistake{Series: u.series, Direction: d, From: u.from, To: u.to, Mended: u.mended, What: what}
}
