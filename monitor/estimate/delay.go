package estimate

import (
	"cmp"
	"errors"
	"slices"
	"time"

	"tailbell/monitor"
)

// Reported says when events of a slot became known.
type Reported struct {
	// Occurred is the end of the slot, At when the events became known.
	Occurred, At monitor.Instant
	Events       int64
}

// Delay is the distribution of the reporting delay.
type Delay struct {
	// Events is how many were used; those that occurred within the last
	// Longest of the data tell only of short delays, and are used for those.
	Events int64 `json:"events"`
	// Longest is the longest delay that the estimate tells of: F is 1 there
	// by definition.
	Longest time.Duration `json:"longest"`
	// Beyond is how many events had a longer delay and were left out.
	Beyond int64 `json:"beyond"`
	steps  []delayStep
	naive  []delayStep
}

// delayStep: from this delay on F has this value.
type delayStep struct {
	delay time.Duration
	f     float64
}

// Errors of DelayOf.
var (
	ErrNoReports = errors.New("no events with a time at which they were reported")
	ErrNoDelay   = errors.New("too few events occurred long enough ago to tell of their delay")
)

// leastAtRisk is how many events must be able to tell of a delay.
const leastAtRisk = 10

// DelayOf estimates the distribution of the delay from the end of a slot
// to the report of its events, from all that was reported by now. What occurred
// recently can only be known if it was reported quickly, so the share of quick
// reports among all is too high (right truncation). The reverse-time product
// limit puts that right:
//
//	F(a) = product over delays x > a of (1 - n(x)/R(x)),
//
// n(x) events with delay x, R(x) those with delay x or less that occurred at
// least x before now. Negative delays count as none.
//
// It is told up to the longest delay for which at least ten events, and a tenth
// of all, occurred long enough ago; F is conditional on delays no longer than
// that, which no data of this span can avoid.
func DelayOf(reports []Reported, now monitor.Instant) (*Delay, error) {
	var items []delayed
	total := int64(0)
	for _, r := range reports {
		reach := int64(now - r.Occurred)
		delay := max(0, int64(r.At-r.Occurred))
		if r.Events <= 0 || reach < delay {
			continue
		}
		items = append(items, delayed{delay, reach, r.Events})
		total += r.Events
	}
	if total == 0 {
		return nil, ErrNoReports
	}
	slices.SortFunc(items, func(a, b delayed) int { return cmp.Compare(b.reach, a.reach) })
	longest, seen := int64(-1), int64(0)
	for _, x := range items {
		if seen += x.events; seen >= leastAtRisk && 10*seen >= total {
			longest = x.reach
			break
		}
	}
	if longest < 0 {
		return nil, ErrNoDelay
	}
	d := &Delay{}
	kept := items[:0]
	for _, x := range items {
		if x.delay > longest {
			d.Beyond += x.events
			continue
		}
		kept = append(kept, x)
		d.Events += x.events
		d.Longest = max(d.Longest, time.Duration(x.delay)*time.Microsecond)
	}
	d.productLimit(kept)
	return d, nil
}

// delayed are events with one delay; reach is how long before now they
// occurred, so the longest delay with which they could be known. Both are in
// microseconds.
type delayed struct{ delay, reach, events int64 }

// productLimit works F out from the longest delay down; byReach is sorted, the
// longest reach first.
func (d *Delay) productLimit(byReach []delayed) {
	byDelay := slices.Clone(byReach)
	slices.SortStableFunc(byDelay, func(a, b delayed) int { return cmp.Compare(b.delay, a.delay) })
	quicker, reaching := d.Events, int64(0) // of delay <= x; of reach >= x
	f, share := 1.0, 1.0
	next := 0
	for i := 0; i < len(byDelay); {
		x := byDelay[i].delay
		n := int64(0)
		for ; i < len(byDelay) && byDelay[i].delay == x; i++ {
			n += byDelay[i].events
		}
		for ; next < len(byReach) && byReach[next].reach >= x; next++ {
			reaching += byReach[next].events
		}
		// Events of delay > x all reach beyond x, so they are in reaching.
		atRisk := reaching - (d.Events - quicker)
		d.steps = append(d.steps, delayStep{time.Duration(x) * time.Microsecond, f})
		d.naive = append(d.naive, delayStep{time.Duration(x) * time.Microsecond, share})
		f *= 1 - float64(n)/float64(atRisk)
		share -= float64(n) / float64(d.Events)
		quicker -= n
	}
	slices.Reverse(d.steps)
	slices.Reverse(d.naive)
}

// F is the estimated share of events that are reported at that age or before.
func (d *Delay) F(age time.Duration) float64 { return at(d.steps, age) }

// Naive is the share among all events that were reported so far, which is
// biased towards quick reports.
func (d *Delay) Naive(age time.Duration) float64 { return at(d.naive, age) }

func at(steps []delayStep, age time.Duration) float64 {
	i, found := slices.BinarySearchFunc(steps, age, func(s delayStep, a time.Duration) int { return cmp.Compare(s.delay, a) })
	switch {
	case found:
		return steps[i].f
	case i == 0:
		return 0
	}
	return steps[i-1].f
}

// Ages returns at most so many of the ages first, first + step and so on at
// which F rises, for a set-up: F at the last of them is 1. first is the age of a
// slot when it is looked at first, be it 0: what was known then already would
// else be taken for nothing.
func (d *Delay) Ages(first, step time.Duration, most int) []time.Duration {
	var ages []time.Duration
	last := 0.0
	for age := first; age <= d.Longest+first+step; age += step {
		f := d.F(age)
		if f > last {
			ages = append(ages, age)
			last = f
		}
		if f >= 1 {
			break
		}
	}
	if len(ages) <= most {
		return ages
	}
	// Of too many, those whose F is nearest to equal steps.
	var kept []time.Duration
	for i := range most {
		age := ages[i*(len(ages)-1)/(most-1)]
		kept = append(kept, age)
	}
	return kept
}

// Reports follows the observations of a history, in the order in which they
// became known, and tells when the events that stand in the end were reported.
// A correction that raises a count reports the additional events then; one that
// lowers it takes back those reported last; one that moves the observation to
// another slot moves them with it.
type Reports struct {
	end      func(monitor.Instant) monitor.Instant
	byID     map[string]*told
	anonymes []Reported
}

type told struct {
	revision int64
	occurred monitor.Instant
	parts    []Reported // oldest first
}

// NewReports returns an empty account. end gives the end of the slot that holds
// a moment.
func NewReports(end func(monitor.Instant) monitor.Instant) *Reports {
	return &Reports{end: end, byID: map[string]*told{}}
}

// Add takes the next observation; those without a reported time, or without
// events, tell nothing, nor do readings of counters.
func (r *Reports) Add(site string, o *monitor.Observation) {
	if !o.HasReported || (!o.HasEvents && !o.Retracted) || o.Reading {
		return
	}
	if o.ID == "" {
		if o.Events > 0 {
			r.anonymes = append(r.anonymes, Reported{r.end(o.Start), o.Reported, o.Events})
		}
		return
	}
	key := site + "\x00" + o.ID
	t := r.byID[key]
	if t == nil {
		t = &told{revision: -1}
		r.byID[key] = t
	}
	if o.Revision <= t.revision {
		return
	}
	t.revision = o.Revision
	if o.Retracted {
		t.parts = nil
		return
	}
	t.occurred = r.end(o.Start)
	t.set(o.Events, o.Reported)
}

// set brings the sum of the parts to n.
func (t *told) set(n int64, at monitor.Instant) {
	have := int64(0)
	for i := range t.parts {
		left := n - have
		if t.parts[i].Events >= left {
			t.parts[i].Events = left
			t.parts = t.parts[:i+1]
			return
		}
		have += t.parts[i].Events
	}
	if n > have {
		t.parts = append(t.parts, Reported{At: at, Events: n - have})
	}
}

// All returns the reports of the events that stand.
func (r *Reports) All() []Reported {
	all := slices.Clone(r.anonymes)
	for _, t := range r.byID {
		for _, p := range t.parts {
			if p.Events > 0 {
				p.Occurred = t.occurred
				all = append(all, p)
			}
		}
	}
	slices.SortFunc(all, func(a, b Reported) int {
		return cmp.Or(cmp.Compare(a.Occurred, b.Occurred), cmp.Compare(a.At, b.At), cmp.Compare(a.Events, b.Events))
	})
	return all
}
