package quillmere

import (
	"fmt"
	"time"

	"tailbell/monitor/rehearse"
)

// woundInfections writes two years of one theatre's weeks: procedures on the
// Monday after, infections two days later. At Christmas there may be none.
func (a *author) woundInfections(s site, t theatre) {
	series := seriesOf(s.name, t.name, "wound-infection")
	r := a.source(series)
	for n := range weeks {
		start, end := a.date(7*n), a.date(7*n+7)
		procedures := t.procedures + rehearse.Between(r, -7, 7)
		if start.Month() == time.December && start.Day() >= 22 {
			procedures = 0
		}
		events := rehearse.Binomial(r, int64(procedures), usualWoundInfections*a.plan.ratio(series, start))
		year, week := start.ISOWeek()
		label := fmt.Sprintf("%s-%dw%02d", t.name, year, week)
		e := rehearse.Element{
			Series: series, ID: "pr-" + label, Revision: 1,
			Start: start, End: end, Exposure: rehearse.Amount(procedures) * rehearse.One, HasExposure: true,
		}
		a.report(r, s.name, denominators, e, end)
		e.ID = "wi-" + label
		e.Exposure, e.HasExposure = 0, false
		e.Events, e.HasEvents = events, true
		a.report(r, s.name, counts, e, end.AddDate(0, 0, 2))
	}
}
