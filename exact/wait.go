package exact

import "math"

// Wait is the law of the exposure (or time) until Events events have happened at Rate a unit:
// gamma. From the start to the k-th event, and from any instant, Events is k; from one event to
// the k-th after it, k too; between the first and the last of k events lie k-1 gaps, so the span
// that k events cover has Events k-1.
//
// Events is in [1, 2^53], Rate positive and finite; else NaN.
type Wait struct {
	Events int64
	Rate   float64
}

func (w Wait) valid() bool { return w.Events >= 1 && w.Events <= maxCount && positive(w.Rate) }

// Within is P(T <= t): so many events in so little; the Poisson upper tail at Events.
func (w Wait) Within(t float64) float64 { return w.side(t, true).prob() }

// LogWithin is the logarithm of Within.
func (w Wait) LogWithin(t float64) float64 { return w.side(t, true).logProb() }

// Beyond is P(T >= t): the Poisson lower tail at Events-1.
func (w Wait) Beyond(t float64) float64 { return w.side(t, false).prob() }

// LogBeyond is the logarithm of Beyond.
func (w Wait) LogBeyond(t float64) float64 { return w.side(t, false).logProb() }

func (w Wait) side(t float64, within bool) side {
	switch {
	case !w.valid() || math.IsNaN(t):
		return undefined
	case t <= 0:
		return outside(!within)
	case math.IsInf(t, 1):
		return outside(within)
	}
	x := Poisson{w.Rate, t}
	if within {
		return x.side(w.Events, true, false)
	}
	return x.side(w.Events-1, false, false)
}

// Early is the t with P(T <= t) = p, 0 < p < 1.
func (w Wait) Early(p float64) float64 {
	if !w.valid() || !(p > 0 && p < 1) {
		return math.NaN()
	}
	return poissonBound(float64(w.Events), p, true, false) / w.Rate
}

// Late is the t with P(T >= t) = p, 0 < p < 1.
func (w Wait) Late(p float64) float64 {
	if !w.valid() || !(p > 0 && p < 1) {
		return math.NaN()
	}
	return poissonBound(float64(w.Events-1), p, false, false) / w.Rate
}

// WaitBounds are the exact two-sided bounds at level 1-alpha of the rate when it took total
// exposure until the events-th event: chi-square with 2 events degrees of freedom on both sides
// (the stopping rule matters: for a fixed exposure take Garwood). Their inverses are bounds of
// the mean gap. NaN for events < 1, total not positive, alpha outside (0, 1].
func WaitBounds(events int64, total, alpha float64) (lower, upper float64) {
	if events < 1 || events > maxCount || !positive(total) || !(alpha > 0 && alpha <= 1) {
		return math.NaN(), math.NaN()
	}
	lower = poissonBound(float64(events), alpha/2, true, false)
	upper = poissonBound(float64(events-1), alpha/2, false, false)
	return lower / total, upper / total
}

// TrialWait is the law of the number of trials until Events events have happened, the last
// included: negative binomial, geometric for Events = 1. P and Q as in Binomial, P positive.
type TrialWait struct {
	Events int64
	P, Q   float64
}

func (w TrialWait) valid() bool {
	return w.Events >= 1 && w.P > 0 && Binomial{w.Events, w.P, w.Q}.valid()
}

// PMF is P(T = n).
func (w TrialWait) PMF(n int64) float64 { return w.point(n).value() }

// LogPMF is the logarithm of PMF.
func (w TrialWait) LogPMF(n int64) float64 { return w.point(n).log() }

func (w TrialWait) point(n int64) point {
	switch {
	case !w.valid() || n > maxCount:
		return undefined.point
	case n < w.Events:
		return impossible.point
	}
	// Events/n times the binomial probability of Events in n
	p := Binomial{n, w.P, w.Q}.point(w.Events)
	if w.Events != n {
		p.root *= float64(w.Events) / float64(n)
	}
	return p
}

// Within is P(T <= n).
func (w TrialWait) Within(n int64) float64 { return w.side(n, true).prob() }

// LogWithin is the logarithm of Within.
func (w TrialWait) LogWithin(n int64) float64 { return w.side(n, true).logProb() }

// Beyond is P(T >= n).
func (w TrialWait) Beyond(n int64) float64 { return w.side(n, false).prob() }

// LogBeyond is the logarithm of Beyond.
func (w TrialWait) LogBeyond(n int64) float64 { return w.side(n, false).logProb() }

func (w TrialWait) side(n int64, within bool) side {
	switch {
	case !w.valid() || n > maxCount:
		return undefined
	case within && n < w.Events:
		return impossible
	case within:
		return Binomial{n, w.P, w.Q}.side(w.Events, true, false)
	case n <= w.Events:
		return certain
	}
	return Binomial{n - 1, w.P, w.Q}.side(w.Events-1, false, false)
}

// Early is the largest n with P(T <= n) <= limit and the size there; ok is false where even
// n = Events is likelier than that.
func (w TrialWait) Early(limit float64) (n int64, size float64, ok bool) {
	if !w.valid() || !(limit > 0) {
		return 0, math.NaN(), false
	}
	n = trialsUntil(w.Events, func(n int64) bool { return w.Within(n) > limit*atLimit })
	switch n {
	case w.Events:
		return 0, 0, false
	case -2:
		n = maxCount/2 + 1
	}
	return n - 1, w.Within(n - 1), true
}

// Late is the smallest n with P(T >= n) <= limit and the size there; ok is false where none up
// to 2^52 is.
func (w TrialWait) Late(limit float64) (n int64, size float64, ok bool) {
	if !w.valid() || !(limit > 0) {
		return 0, math.NaN(), false
	}
	n = trialsUntil(w.Events, func(n int64) bool { return w.Beyond(n) <= limit*atLimit })
	if n < 0 {
		return 0, 0, false
	}
	return n, w.Beyond(n), true
}

// TrialWaitBounds are the exact two-sided bounds at level 1-alpha of the probability when it took
// trials until the events-th event (inverse sampling; Haldane 1945): the lower is Clopper and
// Pearson's, the upper has events-1 in trials-1 below it. NaN outside 1 <= events <= trials.
func TrialWaitBounds(events, trials int64, alpha float64) (lower, upper float64) {
	if events < 1 || events > trials || trials > maxCount || !(alpha > 0 && alpha <= 1) {
		return math.NaN(), math.NaN()
	}
	lower, _ = binomialLower(events, trials, alpha/2, false)
	_, upper = binomialLower(trials-events, trials-1, alpha/2, false)
	return lower, upper
}
