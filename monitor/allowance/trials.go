package allowance

import "tailbell/exact"

// Windows of the last n trials are the shortest runs of latest moments that hold
// n trials or more: what comes at one moment, a batch, is never split. They are
// looked at when events come.
//
// Where all batches are alike the window always holds as many trials, one batch
// in and one out, and crossings are exact: of single trials
// theta (1-theta) P(Bin(n-1, theta) = k-1) each.
//
// Where they are not, the window of a batch of b trials may hold m, from n to n
// and the largest batch less one, and an alert opens at most where an event came
// in the batch and the window signals. Summed over the batch's trials, one of
// which was that event, that is at most b theta P(Bin(m-1, theta) >= k(m)-1),
// whatever the sizes and the look before were, as long as sizes don't follow from
// what the trials came to. Nor does a look signal more often than its limit says.

// batch is the least and the largest number of trials that come at one moment.
func (p *Plan) batch() (least, most int64) {
	return max(1, p.Batch[0]), max(1, p.Batch[1])
}

// volume is how many trials a slot brings at most, on average.
func (p *Plan) volume() float64 {
	if p.Volume == 0 {
		return p.Exposure
	}
	return p.Volume
}

// trial is the part of a window of trials.
func (p *Plan) trial(i int) *part {
	w := p.Windows[i]
	x := part{plan: p, index: i, window: w, arrival: true, looks: float64(p.SlotsPerYear * p.volume())}
	return x.in(Upper, x.held())
}

// ofTrials reports a window of trials.
func (x *part) ofTrials() bool { return x.window.Trials > 0 }

// even reports that all batches are alike.
func (x *part) even() bool {
	least, most := x.plan.batch()
	return least == most
}

// held is how many trials the window holds: whole batches, or n where batches
// differ, the least that it can hold.
func (x *part) held() load {
	n := x.window.Trials
	if b, most := x.plan.batch(); b == most {
		n = (n + b - 1) / b * b
	}
	return load{size: float64(n)}
}

// costOfTrials is what a limit on p costs a trial.
func (x *part) costOfTrials(m *model, alpha float64) cost {
	if x.even() {
		return x.evenBatches(m, m.critical(x.now, alpha))
	}
	return x.anyBatches(m, alpha)
}

// evenBatches is the cost of a trial where all batches are alike.
func (x *part) evenBatches(m *model, now critical) cost {
	if !now.ok {
		return cost{}
	}
	n := int64(x.now.size)
	b, _ := x.plan.batch()
	var c cost
	for _, at := range m.nodes {
		theta := min(1, at.rate)
		crossing := 0.0
		if b == 1 {
			crossing = exact.TrialCrossing(theta, n, now.k)
		} else {
			batch := exact.NewBinomial(b, theta)
			crossing = crossUpper(batch, exact.NewBinomial(n-b, theta), batch, now.k, now.k) / float64(b)
		}
		c.look += float64(at.weight * crossing)
		c.first += float64(at.weight * exact.NewBinomial(n, theta).Upper(now.k))
	}
	return c
}

// anyBatches bounds the cost of a trial whatever the batches are: for each
// critical count at the largest window that has it. A first look costs nothing
// besides, for nothing was assumed of the look before.
func (x *part) anyBatches(m *model, alpha float64) cost {
	_, most := x.plan.batch()
	last := x.window.Trials + most - 1
	critical := func(n int64) critical { return m.critical(load{size: float64(n)}, alpha) }
	if !critical(last).ok {
		return cost{}
	}
	n := firstOf(x.window.Trials, last, func(n int64) bool { return critical(n).ok })
	var worst cost
	for range manyStretches {
		k := critical(n).k
		end := firstOf(n, last+1, func(n int64) bool {
			return n > last || !exact.AtMost(m.size(load{size: float64(n)}, k), alpha)
		}) - 1
		worst = worst.atLeast(cost{look: m.enters(end, k)})
		if n = end + 1; n > last {
			break
		}
	}
	if n <= last { // the rest together: this count in the largest window
		worst = worst.atLeast(cost{look: m.enters(last, critical(n).k)})
	}
	return x.limited(m, worst, alpha, true).only()
}

// only is the cost without that of a first look.
func (c cost) only() cost { return cost{look: c.look} }

// enters is the chance of a trial to be an event in a window of n trials that
// holds k events or more, averaged over the true proportions.
func (m *model) enters(n, k int64) float64 {
	sum := 0.0
	for _, at := range m.nodes {
		theta := min(1, at.rate)
		sum += float64(at.weight * float64(theta*exact.NewBinomial(n-1, theta).Upper(k-1)))
	}
	return sum
}

// firstOf is the first number in [from, to] of which something holds that holds
// of to, and of all after the first.
func firstOf(from, to int64, holds func(int64) bool) int64 {
	for from < to {
		if middle := from + (to-from)/2; holds(middle) {
			to = middle
		} else {
			from = middle + 1
		}
	}
	return to
}
