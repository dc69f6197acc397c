package exact

import "math"

// Counting is what a crossing needs of the law of a count. All laws of this
// package have it.
type Counting interface {
	PMF(k int64) float64
	Upper(k int64) float64
	Lower(k int64) float64
}

// CrossingUpper returns the probability that a look signals in the upper tail
// where the look before it did not: the sum of leaving and shared counts lies
// under before, that of shared and entering ones at or over now.
//
// A rolling window of independent slots moves on: the slots that leave it, those
// that both looks share and those that enter are three independent counts, so
// that the probability is the sum over c of P(shared = c) P(leaving <= before-1-c)
// P(entering >= now-c). Every term is positive. Where reports come late, what is
// newly known of the shared slots belongs to the entering count.
//
// It is not monotone in now: under the mean a window nearly always signals, and
// seldom crosses.
func CrossingUpper(leaving, shared, entering Counting, before, now int64) float64 {
	sum := 0.0
	for c := int64(0); c < before; c++ {
		if mass := shared.PMF(c); mass > 0 {
			sum += float64(mass * leaving.Lower(before-1-c) * entering.Upper(now-c))
		}
	}
	return sum
}

// CrossingLower is the same for the lower tail: the look before lay over before,
// this one at or under now.
func CrossingLower(leaving, shared, entering Counting, before, now int64) float64 {
	sum := 0.0
	for c := int64(0); c <= now; c++ {
		if mass := shared.PMF(c); mass > 0 {
			sum += float64(mass * leaving.Upper(before+1-c) * entering.Lower(now-c))
		}
	}
	return sum
}

// ArrivalCrossings returns how often, in a unit of time, an arrival brings the
// events of the span that ends with it from under k to k or more. Messages of j
// events arrive at rates[j-1] a unit of time, independently (a compound Poisson
// process in its steady state); span is in the same unit. For single events it
// is rate P(Pois(rate span) = k-1). NaN outside the domain: k >= 1, span >= 0,
// rates finite and not negative.
func ArrivalCrossings(rates []float64, span float64, k int64) float64 {
	all := dd{}
	for _, r := range rates {
		if !(r >= 0) || math.IsInf(r, 0) {
			return math.NaN()
		}
		all = all.addFloat(r)
	}
	if k < 1 || !(span >= 0) || math.IsInf(span, 0) {
		return math.NaN()
	}
	if len(rates) == 1 {
		return rates[0] * Poisson{Rate: rates[0], Exposure: span}.PMF(k-1)
	}
	held := compound(rates, all.mulFloat(span), span, k)
	sum := 0.0
	for j, rate := range rates {
		for n := max(0, k-int64(j)-1); n < k; n++ {
			sum += float64(rate * held[n])
		}
	}
	return sum
}

// CompoundPoisson returns the probabilities of 0 to n-1 events where messages of j
// events, independent of each other, have the mean means[j-1]; nil outside the
// domain: n >= 1, means finite and not negative.
func CompoundPoisson(means []float64, n int64) []float64 {
	all := dd{}
	for _, m := range means {
		if !(m >= 0) || math.IsInf(m, 0) {
			return nil
		}
		all = all.addFloat(m)
	}
	if n < 1 {
		return nil
	}
	return compound(means, all, 1, n)
}

// compound returns the probabilities of 0 to n-1 events in a span in which mean
// messages are expected, by Panjer's recursion (1981, ASTIN Bulletin 12:22-26): all
// terms are positive. It runs on what the probabilities are over that of none,
// brought down by 2^512 whenever they get large, since exp(-mean) itself underflows.
func compound(rates []float64, mean dd, span float64, n int64) []float64 {
	const step = 512
	p := make([]float64, n)
	p[0] = 1
	scale := 0.0
	for i := int64(1); i < n; i++ {
		sum := 0.0
		for j := int64(1); j <= min(i, int64(len(rates))); j++ {
			sum += float64(float64(j) * rates[j-1] * p[i-j])
		}
		if p[i] = float64(sum*span) / float64(i); p[i] > 0x1p512 {
			for j := range p[:i+1] {
				p[j] *= 0x1p-512
			}
			scale += step
		}
	}
	e := twoSum(float64(scale*ln2Head), float64(scale*ln2Mid)).add(mean.neg())
	for i := range p {
		p[i] *= expTwo(e.hi, e.lo)
	}
	return p
}

// TrialCrossing returns the probability that a trial brings the events of the
// last n trials from under k to k: theta (1-theta) P(Bin(n-1, theta) = k-1). NaN
// outside the domain: n >= 1, 1 <= k <= n, theta in [0, 1].
func TrialCrossing(theta float64, n, k int64) float64 {
	if n < 1 || k < 1 || k > n || !(theta >= 0 && theta <= 1) {
		return math.NaN()
	}
	return theta * (1 - theta) * NewBinomial(n-1, theta).PMF(k-1)
}
