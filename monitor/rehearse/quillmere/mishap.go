package quillmere

import (
	"math/rand/v2"
	"time"

	"tailbell/monitor/rehearse"
)

// wardHorizon is how long the wards' data may change; what an outage holds
// back for longer is refused.
const wardHorizon = 120 * day

// report sends what a site's desk has to say about t on a morning, late if an
// outage or chance so wills, and then perhaps one everyday mishap about it.
func (a *author) report(r *rand.Rand, site string, what side, e rehearse.Element, morning time.Time) {
	arrives, held, never := a.plan.delayed(e.Series, what, e.Start)
	switch {
	case never:
		return
	case held:
		morning = arrives
	case r.IntN(1000) < 25:
		morning = morning.AddDate(0, 0, rehearse.Between(r, 4, 25))
	}
	e.Reported = a.desk(site, morning)
	e.Sent = e.Reported
	if e.Reported.After(e.End.Add(wardHorizon)) {
		e.Meant = rehearse.Refused
		a.pub.Send(e)
		return
	}
	a.pub.Send(e)
	switch u := r.IntN(10_000); {
	case u < 150:
		a.corrected(r, site, e, morning, false)
	case u < 180:
		a.corrected(r, site, e, morning, true)
	case u < 240:
		a.repeated(r, site, e, morning)
	case u < 250:
		a.contradicted(r, site, e, morning)
	}
}

func (a *author) later(r *rand.Rand, morning time.Time) time.Time {
	return morning.AddDate(0, 0, rehearse.Between(r, 2, 20))
}

// corrected sends a higher revision, up or down; with stale the old one comes
// again after it.
func (a *author) corrected(r *rand.Rand, site string, e rehearse.Element, morning time.Time, stale bool) {
	fixed := e
	fixed.Revision++
	if e.Events > 0 || e.HasExposure || r.IntN(10) == 0 {
		differ(r, &fixed) // else a count of zero is confirmed
	}
	when := a.later(r, morning)
	fixed.Reported = a.desk(site, when)
	fixed.Sent = fixed.Reported
	a.pub.Send(fixed)
	if stale {
		e.Sent = a.desk(site, a.later(r, when))
		e.Meant = rehearse.Outdated
		e.Alone = true
		a.pub.Send(e)
	}
}

// differ changes what an element says, a little.
func differ(r *rand.Rand, e *rehearse.Element) {
	switch {
	case e.HasEvents && e.Start.Equal(e.End):
		e.Start = e.Start.Add(time.Duration(rehearse.Between(r, 1, 9)) * time.Minute)
		e.End = e.Start
	case e.HasEvents && e.Events > 0 && r.IntN(2) == 0:
		e.Events--
	case e.HasEvents:
		e.Events++
	case e.Exposure%rehearse.One == 0:
		e.Exposure += rehearse.Amount(rehearse.Between(r, 1, 3)) * rehearse.One
	case r.IntN(2) == 0:
		e.Exposure -= rehearse.Amount(rehearse.Between(r, 1, 15)) * rehearse.Tenth
	default:
		e.Exposure += rehearse.Amount(rehearse.Between(r, 1, 15)) * rehearse.Tenth
	}
}

// repeated sends the same again, days later.
func (a *author) repeated(r *rand.Rand, site string, e rehearse.Element, morning time.Time) {
	e.Sent = a.desk(site, a.later(r, morning))
	e.Meant = rehearse.Repeat
	e.Alone = true
	a.pub.Send(e)
}

// contradicted sends other content under the same id and revision.
func (a *author) contradicted(r *rand.Rand, site string, e rehearse.Element, morning time.Time) {
	differ(r, &e)
	e.Reported = a.desk(site, a.later(r, morning))
	e.Sent = e.Reported
	e.Meant = rehearse.Refused
	a.pub.Send(e)
}
