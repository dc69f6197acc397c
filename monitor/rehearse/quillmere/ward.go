package quillmere

import (
	"fmt"
	"math/rand/v2"
	"time"

	"tailbell/monitor/rehearse"
)

func compact(t time.Time) string { return t.Format("20060102") }

// lineInfections writes two years of one ward's line infections: the count of
// a day the next morning, its device-days a day later by somebody else.
func (a *author) lineInfections(s site, w ward) {
	series := seriesOf(s.name, w.name, "line-infection")
	r := a.source(series)
	for n := range days {
		start, end := a.date(n), a.date(n+1)
		devices := w.devices + rehearse.Between(r, -6, 6)
		events := rehearse.Poisson(r, usualLineInfections*a.plan.ratio(series, start)*float64(devices))
		a.report(r, s.name, counts, rehearse.Element{
			Series: series, ID: "li-" + w.name + "-" + compact(start), Revision: 1,
			Start: start, End: end, Events: events, HasEvents: true,
		}, end)
		a.report(r, s.name, denominators, rehearse.Element{
			Series: series, ID: "dd-" + w.name + "-" + compact(start),
			Start: start, End: end, Exposure: rehearse.Amount(devices) * rehearse.One, HasExposure: true,
		}, end.AddDate(0, 0, 1))
	}
}

// falls writes two years of one ward's falls, one by one, and its bed-days.
func (a *author) falls(s site, w ward) {
	series := seriesOf(s.name, w.name, "fall")
	r := a.source(series)
	var sum rehearse.Amount
	since, number := 0, 0
	for n := range days {
		start, end := a.date(n), a.date(n+1)
		beds := rehearse.Amount(w.beds*10-rehearse.Between(r, 0, 53)) * rehearse.Tenth
		mu := usualFalls * a.plan.ratio(series, start) * float64(beds) / float64(rehearse.One)
		for range rehearse.Poisson(r, mu) {
			number++
			at := start.Add(time.Duration(r.Int64N(int64(end.Sub(start)/time.Minute))) * time.Minute)
			a.fall(r, s, w, at, fmt.Sprintf("fall-%s-%04d", w.name, number))
		}
		sum += beds
		weekday := start.Weekday()
		if w.halfWeekly && weekday != time.Wednesday && weekday != time.Sunday && n != days-1 {
			continue
		}
		a.bedDays(r, s, rehearse.Element{
			Series: series, ID: "bd-" + w.name + "-" + compact(start), Revision: 1,
			Start: a.date(since), End: end, Exposure: sum, HasExposure: true,
		})
		sum, since = 0, n+1
	}
}

// bedDays reports bed-days the next morning; where the unit is mistaken, wrong
// at first.
func (a *author) bedDays(r *rand.Rand, s site, e rehearse.Element) {
	u := a.plan.unitError(e.Series, e.Start)
	if u == nil {
		a.report(r, s.name, denominators, e, e.End)
		return
	}
	right := e.Exposure
	e.Exposure = right * rehearse.Amount(u.hundredths) / 100
	a.sendThenRevise(s, e, e.End, u.mended, func(e *rehearse.Element) { e.Exposure = right })
}

// fall reports one fall; a few are moved to another ward of the site or taken
// back.
func (a *author) fall(r *rand.Rand, s site, w ward, at time.Time, id string) {
	e := rehearse.Element{
		Series: seriesOf(s.name, w.name, "fall"), ID: id, Revision: 1,
		Start: at, End: at, Events: 1, HasEvents: true,
	}
	y, m, d := at.Date()
	morning := time.Date(y, m, d+1, 0, 0, 0, 0, a.zone)
	if m := a.plan.misfiling(s.name, w.name, at); m != nil {
		right := e.Series
		e.Series = m.series()
		a.sendThenRevise(s, e, morning, m.mended, func(e *rehearse.Element) { e.Series = right })
		return
	}
	switch u := r.IntN(100); {
	case u < 2:
		a.sendThenRevise(s, e, morning, a.later(r, morning), moveTo(s, w, r.IntN(len(s.wards)-1)))
	case u < 3:
		a.sendThenRevise(s, e, morning, a.later(r, morning), retraction)
	default:
		a.report(r, s.name, counts, e, morning)
	}
}

// sendThenRevise sends an element and, on a later morning, what revise makes
// of it under the next revision.
func (a *author) sendThenRevise(s site, e rehearse.Element, first, second time.Time, revise func(*rehearse.Element)) {
	if arrives, held, _ := a.plan.delayed(e.Series, counts, e.Start); held {
		second = arrives.Add(second.Sub(first)).In(a.zone)
		first = arrives
	}
	e.Reported = a.desk(s.name, first)
	e.Sent = e.Reported
	a.pub.Send(e)
	e.Revision++
	e.Reported = a.desk(s.name, second)
	e.Sent = e.Reported
	revise(&e)
	a.pub.Send(e)
}

func retraction(e *rehearse.Element) {
	e.Retracted, e.HasEvents, e.HasExposure = true, false, false
}

// moveTo moves an element to the n-th of the other wards of its site.
func moveTo(s site, from ward, n int) func(*rehearse.Element) {
	return func(e *rehearse.Element) {
		for _, w := range s.wards {
			if w.name == from.name {
				continue
			}
			if n == 0 {
				e.Series = seriesOf(s.name, w.name, "fall")
				return
			}
			n--
		}
	}
}
