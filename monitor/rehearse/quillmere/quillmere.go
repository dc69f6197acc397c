// Package quillmere is the demo's scenario: two years, 2024 and 2025, of the
// Quillmere Hospitals and of the payments service Ferrybill.
//
// All of it is invented: the hospitals, their wards and theatres, the service,
// every count, every name and every source. Nothing in it is taken from any
// real place, and nothing in it should be taken for one.
//
// Three sites with four wards each count line infections per device-day and
// falls per bed-day; two theatres at each site count wound infections per
// procedure; Ferrybill counts failed requests per request, by the hour, for
// four services in two regions. The README of the folder above says what is
// planted in it.
package quillmere

import (
	_ "embed" // the set-up
	"fmt"
	"math/rand/v2"
	"time"

	"tailbell/config"
	"tailbell/monitor/rehearse"
)

//go:embed setup.toml
var setup []byte

const (
	zoneName = "Europe/Berlin"
	days     = 731 // 2024-01-01 to 2025-12-31
	weeks    = 104 // whole weeks, the first from 2024-01-01
	day      = 24 * time.Hour
)

// author writes the scenario.
type author struct {
	seed uint64
	zone *time.Location
	pub  rehearse.Publisher
	plan plan
	// sent counts what each desk has sent on each day, so that every report
	// has its own second.
	sent map[deskDay]int
}

type deskDay struct {
	site string
	date int64
}

// Generate returns the scenario for a seed. It fails only if the scenario
// contradicts itself, which is a fault of this package, or if the time zone is
// missing.
func Generate(seed uint64) (*rehearse.Scenario, error) {
	zone, err := config.LoadZone(zoneName)
	if err != nil {
		return nil, fmt.Errorf("the scenario lies in %s: %w", zoneName, err)
	}
	a := &author{seed: seed, zone: zone, sent: make(map[deskDay]int)}
	a.plan = a.newPlan()
	for _, s := range sites {
		for _, w := range s.wards {
			a.lineInfections(s, w)
			a.falls(s, w)
		}
		for _, t := range s.theatres {
			a.woundInfections(s, t)
		}
	}
	a.failedRequests()
	a.mistakes()
	a.rubbish()
	if err := a.acts(); err != nil {
		return nil, err
	}
	messages, ledger, err := a.pub.Publish(a.source("packing"), rules(zone), ferrybill)
	if err != nil {
		return nil, fmt.Errorf("the scenario of seed %d contradicts itself: %w", seed, err)
	}
	return &rehearse.Scenario{
		Name: "Quillmere Hospitals and Ferrybill, invented", Seed: seed, Setup: append([]byte(nil), setup...),
		Messages: messages, Ledger: ledger, Planted: a.plan.excesses, Mistakes: a.plan.mistakes,
	}, nil
}

// rules is what the publishers know of the indicators in the set-up.
func rules(zone *time.Location) []rehearse.Rule {
	return []rehearse.Rule{
		{LastPart: "line-infection", Slots: rehearse.Daily, Zone: zone, Grain: rehearse.Millionth, Horizon: 120 * day, Ahead: 2 * day},
		{LastPart: "fall", Slots: rehearse.Daily, Zone: zone, Each: true, Grain: rehearse.Millionth, Horizon: 120 * day, Ahead: 2 * day},
		{LastPart: "wound-infection", Slots: rehearse.Weekly, Zone: zone, Grain: rehearse.One, Horizon: 182 * day, Ahead: 2 * day},
		{LastPart: "failed-request", Slots: rehearse.Hourly, Zone: zone, NoIDs: true, Grain: rehearse.One, Horizon: 7 * day, Ahead: 5 * time.Minute},
	}
}

func (a *author) source(purpose string) *rand.Rand { return rehearse.Source(a.seed, purpose) }

// date is the midnight that begins day n of the scenario, from 0.
func (a *author) date(n int) time.Time { return time.Date(2024, 1, 1+n, 0, 0, 0, 0, a.zone) }

// desk is the next free second at which a site reports on a day: each site
// has its ten minutes in the morning.
func (a *author) desk(site string, date time.Time) time.Time {
	y, m, d := date.In(a.zone).Date()
	key := deskDay{site, time.Date(y, m, d, 0, 0, 0, 0, time.UTC).Unix()}
	n := a.sent[key]
	a.sent[key]++
	minute := 10
	for i := range sites {
		if sites[i].name == site {
			minute += 10 * i
		}
	}
	return time.Date(y, m, d, 8, minute, n, 0, a.zone)
}
