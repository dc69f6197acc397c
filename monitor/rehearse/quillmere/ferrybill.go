package quillmere

import (
	"math"
	"math/rand/v2"
	"time"

	"tailbell/monitor/rehearse"
)

// failedRequests writes the hours of Ferrybill: failures and requests in one
// observation, two minutes after the hour.
func (a *author) failedRequests() {
	second := 0
	for _, region := range regions {
		for _, service := range services {
			second++
			a.service(seriesOf(ferrybill, region, service, "failed-request"), second)
		}
	}
}

func (a *author) service(series string, second int) {
	r := a.source(series)
	end := a.date(days)
	after := 2*time.Minute + time.Duration(second)*time.Second
	for start := a.date(0); start.Before(end); start = start.Add(time.Hour) {
		requests := requestsIn(r, start)
		events := rehearse.Poisson(r, usualFailedRequests*a.plan.ratio(series, start)*float64(requests))
		sent := start.Add(time.Hour + after)
		arrives, held, never := a.plan.delayed(series, counts, start)
		switch {
		case never:
			continue
		case held:
			sent = arrives.Add(after)
		case r.IntN(2000) == 0:
			sent = sent.Add(time.Duration(rehearse.Between(r, 1, 70)) * time.Hour)
		}
		a.pub.Send(rehearse.Element{
			Series: series, Start: start, End: start.Add(time.Hour),
			Events: events, HasEvents: true, Exposure: rehearse.Amount(requests) * rehearse.One, HasExposure: true,
			Reported: sent, Sent: sent,
		})
	}
}

// requestsIn draws the requests of an hour: more by day than by night.
func requestsIn(r *rand.Rand, start time.Time) int {
	phase := 2 * math.Pi * float64(start.Hour()-14) / 24
	return 230_000 + int(70_000*math.Cos(phase)) + rehearse.Between(r, -15_000, 15_000)
}
