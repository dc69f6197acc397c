package config

import "fmt"

// What the engine holds, in bytes: figures for planning, as the benchmark
// Footprint of package monitor measures them on amd64, rounded up. Garbage that
// is not yet collected may come to as much again.
const (
	bytesPerSeries  = 1152 // a series, or a sum: its name, its place in the map, its alerts
	bytesPerCell    = 76   // a slot: its sums, who speaks for them, and room for the next ones
	bytesPerLook    = 24   // a look of one window that late data may still re-run
	bytesPerInstant = 40   // an instant at which events or trials came, where looks are made at them
	bytesPerID      = 192  // an observation id with what it said, in a map that has just grown
)

// Memory is the estimate of what a daemon holds when it is full.
type Memory struct {
	// Series holds, for each indicator, the bytes that one of its series
	// takes.
	Series []int64
	// AllSeries is the cost of Limits.MaxSeries series of the dearest
	// indicator, AllIDs that of Limits.MaxIDs ids; Total is their sum.
	AllSeries int64
	AllIDs    int64
	Total     int64
}

// Memory estimates what a daemon with this set-up holds when it is full:
//
//	series = 1152 + 76 (kept + horizon) + 24 (horizon) (sum over windows of 1/step) + 40 trials
//	total  = MaxSeries x the dearest series + 192 MaxIDs
//
// in slots, where kept is the longest window or, if that is more, the longest
// refresh, gap and span together of a trailing or peers baseline, and trials are
// those of the longest window of the last trials, each at a moment of its own.
// Where looks are made at events, a slot takes 40 more, as if one came in each. A
// sum takes what a series takes, and is one of MaxSeries. Ids cost nothing if no
// indicator keeps them.
func (s *Setup) Memory() Memory {
	var m Memory
	var dearest int64
	keep := false
	for i := range s.Indicators {
		in := &s.Indicators[i]
		m.Series = append(m.Series, in.memory())
		dearest = max(dearest, in.memory())
		keep = keep || in.KeepIDs
	}
	m.AllSeries = int64(s.Limits.MaxSeries) * dearest
	if keep {
		m.AllIDs = int64(s.Limits.MaxIDs) * bytesPerID
	}
	m.Total = m.AllSeries + m.AllIDs
	return m
}

func (in *Indicator) memory() int64 {
	looks := 0
	horizon := in.horizonSlots()
	for _, w := range in.Windows {
		looks += horizon/w.Step + 1
	}
	trials := int64(0)
	for _, w := range in.Windows {
		trials = max(trials, w.Trials)
	}
	slot := int64(bytesPerCell)
	if in.ArrivalLooks {
		slot += bytesPerInstant
	}
	return bytesPerSeries + trials*bytesPerInstant + int64(in.keptSlots()+horizon)*slot + int64(looks)*bytesPerLook
}

// checkMemory refuses a set-up whose estimate is over its own limit.
func (s *Setup) checkMemory(limits section) {
	m := s.Memory()
	if m.Total <= s.Limits.Memory {
		return
	}
	limits.fault("memory", fmt.Sprintf("the set-up may need %s (%s for %s series, %s for ids) but %s is the limit",
		FormatSize(m.Total), FormatSize(m.AllSeries), grouped(int64(s.Limits.MaxSeries)), FormatSize(m.AllIDs), FormatSize(s.Limits.Memory)),
		"lower max_series, max_ids, a horizon or a window, or raise limits.memory")
}
