package allowance

import "math"

// Outlook is one part of a plan, ready to be asked what it would find, and what
// other limits would cost.
type Outlook struct {
	x     *part
	truth *model
	rate  float64
	part  Part
	// criticals are those of the cycle's slots, in order.
	criticals []critical
}

// Outlook prepares the i-th part of the limits that a plan has.
func (p *Plan) Outlook(l *Limits, i int) *Outlook {
	o := &Outlook{x: p.parts()[i], part: l.Parts[i], rate: p.Law.Rate}
	if p.Law.Estimated {
		o.rate = max(float64(p.Law.Events), 0.5) / p.Law.Exposure
	}
	truth := *o.x.model
	truth.sums = nil
	truth.law.Margin = 1
	o.truth = &truth
	for at := range max(1, len(p.Cycle)) {
		o.criticals = append(o.criticals, o.x.model.critical(o.window(at), o.part.Alpha))
	}
	return o
}

// window is the load of the window whose newest slot is the cycle's at.
func (o *Outlook) window(at int) load {
	p := o.x.plan
	if o.x.ofTrials() {
		return o.x.now
	}
	return p.load(at, 0, o.x.window.Slots, p.known)
}

// Rate is the usual rate or proportion: the known one, or the estimate.
func (o *Outlook) Rate() float64 { return o.rate }

// Critical is the count that signals in the window whose newest slot is the
// cycle's at; ok is false where none does.
func (o *Outlook) Critical(at int) (k int64, ok bool) {
	c := o.criticals[at%len(o.criticals)]
	return c.k, c.ok
}

// Expected is the count to be expected in a window at the usual rate, at the
// beginning of the cycle.
func (o *Outlook) Expected() float64 {
	m := o.truth.at(o.rate)
	return m.mean(o.window(0))
}

// Chance is the chance of a look to signal whose whole window lies under ratio
// times the usual rate (a proportion stays under 1), averaged over the cycle.
func (o *Outlook) Chance(ratio float64) float64 {
	rate := o.rate * ratio
	if o.truth.law.Proportion {
		rate = min(rate, 1)
	}
	m := o.truth.at(rate)
	sum := 0.0
	for at, c := range o.criticals {
		if c.ok {
			sum += m.tailAt(m.nodes[0].rate, o.window(at), c.k)
		}
	}
	return sum / float64(len(o.criticals))
}

// Ratio is the ratio to the usual rate that is found with a chance: the least
// above it in the upper tail, the greatest below it in the lower. ok is false
// where none is.
func (o *Outlook) Ratio(chance float64) (ratio float64, ok bool) {
	from, to := 0.0, 1.0 // the chance grows from one to the other
	if o.part.Tail == Upper {
		for to < 1e9 && !(o.Chance(to) >= chance) {
			from, to = to, 2*to
		}
	} else {
		from, to = 1e3, 0
	}
	if !(o.Chance(to) >= chance) {
		return math.NaN(), false
	}
	for range 60 {
		middle := from + (to-from)/2
		if o.Chance(middle) >= chance {
			to = middle
		} else {
			from = middle
		}
	}
	return to, true
}

// Under is the part under another limit on p.
func (o *Outlook) Under(alpha float64) Part { return o.x.predict(alpha) }

// Size is the p-value of a count at the beginning of the cycle, with room for
// rounding: the limit under which it is the critical count.
func (o *Outlook) Size(k int64) float64 { return o.x.model.size(o.window(0), k) * ample }

// Of is the outlook of the same window and tail under the limit of another part.
func (o *Outlook) Of(part Part) *Outlook {
	other := *o
	other.part = part
	other.criticals = make([]critical, len(o.criticals))
	for at := range other.criticals {
		other.criticals[at] = o.x.model.critical(o.window(at), part.Alpha)
	}
	return &other
}
