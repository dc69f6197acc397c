package planning

import (
	"context"
	"math/rand/v2"
	"sync"

	"tailbell/exact"
	"tailbell/exact/resample"
	"tailbell/monitor/allowance"
)

// Delay is how long a change goes unnoticed: from the beginning of a slot from
// which on everything happens at ratio times the usual rate, after a past as
// usual, to the end of the slot whose look signals first.
type Delay struct {
	Ratio float64 `json:"ratio"`
	// Draws are the simulated courses, Found those that signalled within Horizon
	// slots, with exact bounds (95 %) of their share.
	Draws      int64   `json:"draws"`
	Found      int64   `json:"found"`
	ShareLower float64 `json:"share_lower"`
	ShareUpper float64 `json:"share_upper"`
	Horizon    int     `json:"horizon_slots"`
	// Half and Most are the delays that a half and nine tenths of the courses do
	// not exceed.
	Half Quantile `json:"half"`
	Most Quantile `json:"nine_tenths"`
}

// Quantile is a quantile of simulated delays with exact bounds (95 %) in slots;
// nil beyond the horizon.
type Quantile struct {
	Slots *int `json:"slots"`
	Lower *int `json:"slots_lower"`
	Upper *int `json:"slots_upper"`
}

// Limits on a course: so many times the longest window, and so many slots.
const (
	longestWindows = 30
	longestCourse  = 20_000
)

// addDelays simulates the delays of all parts, ratio by ratio.
func (q *Question) addDelays(ctx context.Context, r *Report, l *allowance.Limits, outlooks []*allowance.Outlook, o Options) error {
	longest := 0
	for _, w := range q.Plan.Windows {
		longest = max(longest, q.slotsOf(w))
	}
	horizon := max(100, min(longestWindows*longest, longestCourse))
	runs, done := 0, 0
	for _, tail := range []allowance.Tail{allowance.Upper, allowance.Lower} {
		if q.watches(tail) {
			runs += len(o.Ratios)
		}
	}
	for _, tail := range []allowance.Tail{allowance.Upper, allowance.Lower} {
		if !q.watches(tail) {
			continue
		}
		var parts []int
		for i := range l.Parts {
			if l.Parts[i].Tail == tail {
				parts = append(parts, i)
			}
		}
		for _, ratio := range o.Ratios {
			if tail == allowance.Lower {
				ratio = 1 / ratio
			}
			c := course{q: q, ratio: ratio, parts: parts, limits: l, outlooks: outlooks, horizon: horizon, longest: longest}
			seed := o.Seed
			plan := resample.Plan{Draws: o.Draws, Seed: seed}
			if before := done * o.Draws; o.Progress != nil {
				plan.Progress = func(n int) { o.Progress(before+n, runs*o.Draws) }
			}
			each, any, err := c.simulate(ctx, plan)
			if err != nil {
				return err
			}
			for i, part := range parts {
				r.Parts[part].Delays = append(r.Parts[part].Delays, each[i].delay(ratio))
			}
			r.Delays = append(r.Delays, any.delay(ratio))
			done++
		}
	}
	return nil
}

func (q *Question) watches(tail allowance.Tail) bool {
	return tail == allowance.Upper && q.Plan.Upper || tail == allowance.Lower && q.Plan.Lower
}

// course is a series whose rate changes.
type course struct {
	q        *Question
	ratio    float64
	parts    []int
	limits   *allowance.Limits
	outlooks []*allowance.Outlook
	horizon  int
	longest  int
}

// tally is how many courses first signalled after so many slots.
type tally struct {
	after []int64
	draws int64
}

// simulate draws courses; what is counted does not depend on their order.
func (c *course) simulate(ctx context.Context, plan resample.Plan) (each []tally, any tally, err error) {
	var mu sync.Mutex
	all := make([]tally, len(c.parts)+1)
	for i := range all {
		all[i].after = make([]int64, c.horizon+1)
	}
	_, err = resample.MonteCarlo(ctx, plan, func() func(*rand.Rand) bool {
		w := newWalk(c)
		return func(rng *rand.Rand) bool {
			first := w.walk(rng)
			mu.Lock()
			defer mu.Unlock()
			soonest := 0
			for i, after := range first {
				all[i].draws++
				all[i].after[after]++
				if after > 0 && (soonest == 0 || after < soonest) {
					soonest = after
				}
			}
			last := len(all) - 1
			all[last].draws++
			all[last].after[soonest]++
			return soonest > 0
		}
	})
	return all[:len(c.parts)], all[len(c.parts)], err
}

// delay is what the tally says; after[0] counts those that never signalled.
func (t *tally) delay(ratio float64) Delay {
	d := Delay{Ratio: ratio, Draws: t.draws, Found: t.draws - t.after[0], Horizon: len(t.after) - 1}
	d.ShareLower, d.ShareUpper = exact.ClopperPearson(d.Found, d.Draws, 0.05)
	d.Half, d.Most = t.quantile(0.5), t.quantile(0.9)
	return d
}

// quantile is an order statistic and two others that enclose the true quantile
// with a chance of 95 % at least, whatever its law.
func (t *tally) quantile(share float64) Quantile {
	below := exact.NewBinomial(t.draws, share)
	low, _, ok := below.CriticalLower(0.025)
	q := Quantile{Slots: t.rank(int64(float64(t.draws)*share) + 1), Lower: new(int)}
	if ok {
		q.Lower = t.rank(low + 1)
	}
	if high, _, ok := below.CriticalUpper(0.025); ok && high < t.draws {
		q.Upper = t.rank(high + 1)
	}
	return q
}

// rank is the n-th smallest delay, nil where it lies beyond the horizon.
func (t *tally) rank(n int64) *int {
	var sum int64
	for after := 1; after < len(t.after); after++ {
		if sum += t.after[after]; sum >= n {
			return &after
		}
	}
	return nil
}
