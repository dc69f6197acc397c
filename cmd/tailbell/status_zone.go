package main

import (
	"time"

	"tailbell/config"
)

// zones are those in which times are told: that of an indicator for what is its
// own, and for the rest the one that all indicators have, else UTC. The zero value
// tells all in UTC.
type zones struct {
	of  map[string]*time.Location
	all *time.Location
}

func zonesOf(setup *config.Setup) zones {
	z := zones{of: map[string]*time.Location{}}
	for i := range setup.Indicators {
		in := &setup.Indicators[i]
		z.of[in.Name] = in.Zone
		if i == 0 {
			z.all = in.Zone
		} else if in.ZoneName != setup.Indicators[0].ZoneName {
			z.all = nil
		}
	}
	return z
}

// rest is the zone of what belongs to no indicator.
func (z zones) rest() *time.Location {
	if z.all == nil {
		return time.UTC
	}
	return z.all
}

// stamp writes a moment that belongs to no indicator, with its zone.
func (z zones) stamp(at time.Time) string { return at.In(z.rest()).Format("2006-01-02 15:04:05 MST") }

// stampOf writes a moment of an indicator, in the zone in which its alerts are told.
func (z zones) stampOf(indicator string, at time.Time) string {
	zone := z.of[indicator]
	if zone == nil {
		zone = z.rest()
	}
	return at.In(zone).Format("2006-01-02 15:04 MST")
}
