package monitor

import (
	"tailbell/config"
	"tailbell/exact"
	"tailbell/monitor/life"
)

// direction is the tail in which a look signals.
type direction int

const (
	upper direction = iota
	lower
	// silence is no tail: nothing was reported at all.
	silence
)

var bothTails = [...]direction{upper, lower}

func (d direction) name() life.Direction {
	switch d {
	case upper:
		return life.Upper
	case silence:
		return life.Silence
	case lower:
	}
	return life.Lower
}

// law is the distribution of the count in a window under its baseline.
type law interface {
	Upper(k int64) float64
	LogUpper(k int64) float64
	Lower(k int64) float64
	LogLower(k int64) float64
	CriticalUpper(limit float64) (k int64, size float64, ok bool)
	CriticalLower(limit float64) (k int64, size float64, ok bool)
}

// newLaw returns the law of the count in a window at the edge of what the
// baseline and its margin allow in that direction.
func newLaw(u *usual, d direction, o *opportunity) law {
	if u.cfg.Measure == config.Proportion {
		return newProportionLaw(u, u.margin(d), o)
	}
	b, margin := u.base, u.margin(d)
	switch {
	case u.ref == nil && b.Spread > 1:
		return exact.NewNegativeBinomial(b.Rate*margin, o.weighted, b.Spread)
	case u.ref == nil:
		return exact.Poisson{Rate: b.Rate * margin, Exposure: o.weighted}
	case b.Spread > 1:
		return exact.NewNegativeBinomial(u.rate()*margin, o.weighted, u.predictive(margin*o.weighted))
	}
	return exact.TwoRate{RefEvents: u.ref.events, Exposure: o.weighted, RefExposure: u.ref.weighted, Margin: margin}
}

// margin is the ratio to the baseline at which the direction is tested.
func (u *usual) margin(d direction) float64 {
	if d == lower {
		return 1 / u.base.Margin
	}
	return u.base.Margin
}

// rate is the usual rate, or the usual proportion: stated, or estimated from
// the reference (half an event where it holds none, and half a trial without
// one where all hold one).
func (u *usual) rate() float64 {
	switch {
	case u.ref == nil:
		return u.base.Rate
	case u.cfg.Measure == config.Proportion:
		return within(u.ref.events, u.ref.exposureFloat(u)) / u.ref.weighted
	}
	return max(float64(u.ref.events), 0.5) / u.ref.weighted
}

func within(events int64, trials float64) float64 {
	return min(max(float64(events), 0.5), trials-0.5)
}

// predictive is the spread of a count around a mean that was itself estimated
// under the same spread: both variances add.
func (u *usual) predictive(exposure float64) float64 {
	return u.base.Spread * (1 + exposure/u.ref.weighted)
}

// newProportionLaw returns the law of the events in a window's trials.
func newProportionLaw(u *usual, margin float64, o *opportunity) law {
	b, n := u.base, int64(o.exposure)
	if o.trials == nil && u.ref == nil {
		return exact.NewBinomial(n, min(1, b.Rate*margin))
	}
	if o.trials == nil {
		return exact.TwoProportion{RefEvents: u.ref.events, RefTrials: int64(u.ref.weighted), Trials: n, Margin: margin}
	}
	usual := u.rate()
	if u.ref == nil {
		usual = min(1, usual*margin)
	} else {
		usual = timesOdds(usual, margin)
	}
	spread := b.Spread
	if u.ref != nil {
		spread = u.predictive(o.exposure)
	}
	c := convolved{}
	for _, t := range o.trials {
		theta := timesOdds(usual, t.factor)
		c.mean += float64(float64(t.n) * theta)
		c.parts = append(c.parts, partOf(t.n, theta, spread))
	}
	return c
}

// timesOdds multiplies the odds of a proportion.
func timesOdds(theta, factor float64) float64 {
	odds := float64(theta * factor)
	return odds / (1 - theta + odds)
}

// partOf is the law of the events in so many trials alike, spread so much more
// than the binomial's variance: a beta-binomial. Its spread can't reach the
// number of trials; one near it is taken as nine tenths of it.
func partOf(n int64, theta, spread float64) independent {
	if spread <= 1 || n < 2 {
		return exact.NewBinomial(n, theta)
	}
	spread = min(spread, float64(0.9*float64(n))+0.1)
	size := float64(n-1)/(spread-1) - 1
	return exact.BetaBinomial{N: n, A: theta * size, B: (1 - theta) * size}
}

// testName names the test, and says where it is not exact.
func testName(u *usual, o *opportunity) string {
	b := u.base
	switch {
	case u.ref != nil && (b.Spread > 1 || o.trials != nil):
		return "predictive test with an estimated baseline (no exact test exists)"
	case u.cfg.Measure == config.Proportion && u.ref != nil && b.Margin != 1:
		return "conditional test of two proportions, margin on the odds ratio (Fisher's noncentral hypergeometric)"
	case u.cfg.Measure == config.Proportion && u.ref != nil:
		return "conditional test of two proportions (hypergeometric)"
	case u.cfg.Measure == config.Proportion && b.Spread > 1:
		return "exact test with spread (sum of beta-binomials)"
	case o.trials != nil:
		return "exact test with strata (sum of binomials)"
	case u.cfg.Measure == config.Proportion:
		return "exact binomial test"
	case u.ref != nil:
		return "conditional test of two rates (binomial; Przyborowski and Wilenski 1940)"
	case b.Spread > 1:
		return "exact negative binomial test"
	}
	return "exact Poisson test"
}

// floatOf returns the decimal as the nearest float64.
func floatOf(d config.Decimal) float64 {
	return Quantity{Lo: d.Coef}.scaled(int(d.Digits))
}

// farBelow reports that the count lies at or under the median of its law, so
// that the upper p-value is at least one half. The medians of the Poisson, the
// binomial and its sums lie within one of their means; spread laws are skewed
// and never passed over.
func farBelow(u *usual, o *opportunity, events int64) bool {
	mean, ok := quickMean(u, upper, o, events)
	return ok && float64(events) <= mean-1
}

// farAbove is the same for the lower tail.
func farAbove(u *usual, o *opportunity, events int64) bool {
	mean, ok := quickMean(u, lower, o, events)
	return ok && float64(events) >= mean+1
}

func quickMean(u *usual, d direction, o *opportunity, events int64) (float64, bool) {
	margin := u.margin(d)
	switch {
	case u.base.Spread > 1 || o.trials != nil:
		return 0, false
	case u.ref == nil:
		return u.base.Rate * margin * o.weighted, u.base.Rate*margin < 1 || u.cfg.Measure == config.Rate
	case u.cfg.Measure == config.Proportion:
		return 0, false
	}
	q := margin * o.weighted / (margin*o.weighted + u.ref.weighted)
	return float64(events+u.ref.events) * q, true
}
