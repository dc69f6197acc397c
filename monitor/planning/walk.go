package planning

import (
	"math/rand/v2"
	"slices"

	"tailbell/exact/resample"
	"tailbell/monitor/allowance"
)

// walk draws one course after the other, with scratch space of its own.
type walk struct {
	*course
	rate  float64
	steps []float64 // of what becomes known of a slot at each age
	// counts are what is known of each slot, the past first.
	counts []int64
	// times are when the events of slots came, in slots; for arrival looks only.
	times []float64
	// places are which trials the events were, for windows of trials only.
	places []int64
	sums   []int64 // by part
	first  []int   // by part: the slot that signalled first, from 1; 0 for none
}

func newWalk(c *course) *walk {
	w := &walk{course: c, rate: c.outlooks[0].Rate()}
	before := 0.0
	for _, f := range c.q.Plan.Known {
		w.steps = append(w.steps, f-before)
		before = f
	}
	w.steps = append(w.steps, 1-before)
	past := c.longest + len(w.steps)
	w.counts = make([]int64, past+c.horizon)
	w.sums, w.first = make([]int64, len(c.parts)), make([]int, len(c.parts))
	return w
}

// walk returns, for each part, the slot after the change whose look signalled
// first, counting from 1; 0 for none within the horizon.
func (w *walk) walk(rng *rand.Rand) []int {
	clear(w.counts)
	clear(w.sums)
	clear(w.first)
	w.times, w.places = w.times[:0], w.places[:0]
	past := len(w.counts) - w.horizon
	phase := rng.IntN(1 << 30)
	for t := range w.counts {
		w.draw(rng, t, past, phase)
		open := t < past
		for i, part := range w.parts {
			p := &w.limits.Parts[part]
			window := w.q.Plan.Windows[p.Window]
			if window.Trials == 0 {
				w.add(i, t, window.Slots)
			}
			if t >= past && w.first[i] == 0 {
				if w.signals(i, p, window, t, phase) {
					w.first[i] = t - past + 1
				}
				open = open || w.first[i] == 0
			}
		}
		if !open {
			break
		}
	}
	return w.first
}

// draw adds what becomes known with slot t, of it and of those before it.
func (w *walk) draw(rng *rand.Rand, t, past, phase int) {
	if len(w.steps) == 1 {
		w.counts[t] = w.count(rng, t, t >= past, phase, 1)
		w.arrive(rng, t, w.counts[t])
		return
	}
	for age, share := range w.steps[:min(len(w.steps), t+1)] {
		slot := t - age
		w.counts[slot] += w.count(rng, slot, slot >= past, phase, share)
	}
}

// add moves the part's window on to slot t.
func (w *walk) add(i, t, slots int) {
	if len(w.steps) > 1 { // slots that it holds already may have grown
		w.sums[i] = 0
		for _, n := range w.counts[max(0, t-slots+1) : t+1] {
			w.sums[i] += n
		}
		return
	}
	w.sums[i] += w.counts[t]
	if t >= slots {
		w.sums[i] -= w.counts[t-slots]
	}
}

// count draws the events of a share of a slot.
func (w *walk) count(rng *rand.Rand, slot int, changed bool, phase int, share float64) int64 {
	plan, exposure := &w.q.Plan, w.q.Plan.Exposure
	ratio, factor := 1.0, 1.0
	if changed {
		ratio = w.ratio
	}
	if n := len(plan.Cycle); n > 0 {
		factor = plan.Cycle[(slot+phase)%n]
	}
	spread := max(1, plan.Law.Spread)
	if plan.Law.Proportion {
		theta := min(1, w.rate*ratio)
		odds := theta * factor
		theta = odds / (1 - theta + odds)
		n := w.trialsIn(slot)
		if spread > 1 && n > 1 {
			size := float64(n-1)/(min(spread, 0.9*float64(n)+0.1)-1) - 1
			a, b := resample.Gamma(rng, theta*size), resample.Gamma(rng, (1-theta)*size)
			theta = a / (a + b)
		}
		return resample.Binomial(rng, n, theta)
	}
	mean := w.rate * ratio * factor * exposure * share
	if spread > 1 && mean > 0 {
		mean = resample.Gamma(rng, mean/(spread-1)) * (spread - 1)
	}
	return resample.Poisson(rng, mean)
}

// arrive gives the events of slot t their moments.
func (w *walk) arrive(rng *rand.Rand, t int, n int64) {
	arrival, trials := false, false
	for _, part := range w.parts {
		p := &w.limits.Parts[part]
		trials = trials || w.q.Plan.Windows[p.Window].Trials > 0
		arrival = arrival || p.Arrival
	}
	switch {
	case trials:
		w.place(rng, t, n)
		return
	case !arrival:
		return
	}
	from := len(w.times)
	for range n {
		w.times = append(w.times, float64(t)+rng.Float64())
	}
	slices.Sort(w.times[from:])
}

// signals reports whether the part's look at the end of slot t, or at an event
// within it, signals.
func (w *walk) signals(i int, p *allowance.Part, window allowance.Window, t, phase int) bool {
	k, ok := w.outlooks[w.parts[i]].Critical(t + phase)
	switch {
	case !ok:
		return false
	case window.Trials > 0:
		return w.amongLast(k, window.Trials, t)
	case p.Arrival:
		return w.arrives(k, float64(window.Slots), t)
	case (t+phase)%window.Step != 0:
		return false
	case p.Tail == allowance.Upper:
		return w.sums[i] >= k
	}
	return w.sums[i] <= k
}

// arrives reports whether k events lie within a span that ends with an event of
// slot t.
func (w *walk) arrives(k int64, span float64, t int) bool {
	for n := len(w.times) - 1; n >= 0 && w.times[n] >= float64(t); n-- {
		if first := n - int(k) + 1; first >= 0 && w.times[first] > w.times[n]-span {
			return true
		}
	}
	return false
}
