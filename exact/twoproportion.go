package exact

import "math"

// TwoProportion compares n events in Trials with RefEvents in RefTrials: Fisher's exact test
// given n+RefEvents. Margin is a margin on the odds ratio, not on the ratio of the proportions:
// under a true odds ratio of Margin, n follows Fisher's noncentral hypergeometric law. Margin 0
// means 1.
//
// The total moves with n. RefEvents <= RefTrials <= 2^42, Trials <= 2^42, all not negative,
// Margin positive and finite; else NaN.
type TwoProportion struct {
	RefEvents, RefTrials, Trials int64
	Margin                       float64
}

func (x TwoProportion) valid() bool {
	return x.RefEvents >= 0 && x.RefEvents <= x.RefTrials && x.RefTrials <= maxUrn && x.Trials >= 0 &&
		x.Trials <= maxUrn && (x.Margin == 0 || positive(x.Margin))
}

func (x TwoProportion) urn(n int64) urn {
	m := x.Margin
	if m == 0 {
		m = 1
	}
	return urn{float64(x.Trials), float64(x.RefTrials), float64(n + x.RefEvents), dd{m, 0}}
}

func (x TwoProportion) side(n int64, upper, mid bool) side {
	switch {
	case !x.valid():
		return undefined
	case n < 0 || n > x.Trials:
		return outside(n < 0 == upper)
	}
	return x.urn(n).side(float64(n), upper, mid)
}

func (x TwoProportion) support() (lo, hi int64) { return 0, x.Trials }

func (x TwoProportion) spread() (mean, sd float64) {
	p := (float64(x.RefEvents) + 1) / (float64(x.RefTrials) + 2)
	if x.Margin != 0 {
		p = p * x.Margin / (1 - p + p*x.Margin)
	}
	t := float64(x.Trials)
	mean = t * p
	return mean, math.Sqrt(mean*(1-p)) * math.Sqrt(1+t/(float64(x.RefTrials)+1))
}

func (x TwoProportion) thin(n int64, upper bool) float64 {
	if x.Margin != 0 && x.Margin != 1 {
		return 0 // no simple share: the search halves instead
	}
	a, m := float64(n), float64(x.RefEvents)
	if upper {
		return (float64(x.RefTrials) - m) / (float64(x.Trials) - a + float64(x.RefTrials) - m)
	}
	return m / (a + m)
}

// OddsRatioBounds are the exact two-sided bounds at level 1-alpha of the odds ratio of the
// proportion behind n events in Trials to the reference's (Cornfield 1956): each tail of Fisher's
// noncentral law is alpha/2. Margin plays no part. 0 below where n is the least and +Inf above
// where it is the largest count possible given the total; NaN outside the domain.
func (x TwoProportion) OddsRatioBounds(n int64, alpha float64) (lower, upper float64) {
	return x.oddsBounds(n, alpha, false)
}

// OddsRatioBoundsMid is OddsRatioBounds with mid-p tails.
func (x TwoProportion) OddsRatioBoundsMid(n int64, alpha float64) (lower, upper float64) {
	return x.oddsBounds(n, alpha, true)
}

func (x TwoProportion) oddsBounds(n int64, alpha float64, mid bool) (lower, upper float64) {
	if !x.valid() || n < 0 || n > x.Trials || !(alpha > 0 && alpha <= 1) {
		return math.NaN(), math.NaN()
	}
	u := x.urn(n)
	lower = u.lowerOdds(float64(n), alpha/2, mid)
	m := u.mirror()
	return lower, 1 / m.lowerOdds(float64(x.RefEvents), alpha/2, mid)
}

// Upper is P(X >= k).
func (x TwoProportion) Upper(k int64) float64 { return x.side(k, true, false).prob() }

// LogUpper is log P(X >= k), where Upper underflows as well.
func (x TwoProportion) LogUpper(k int64) float64 { return x.side(k, true, false).logProb() }

// Lower is P(X <= k).
func (x TwoProportion) Lower(k int64) float64 { return x.side(k, false, false).prob() }

// LogLower is log P(X <= k), where Lower underflows as well.
func (x TwoProportion) LogLower(k int64) float64 { return x.side(k, false, false).logProb() }

// MidUpper is P(X > k) + P(X = k)/2 (Lancaster 1961).
func (x TwoProportion) MidUpper(k int64) float64 { return x.side(k, true, true).prob() }

// LogMidUpper is the logarithm of MidUpper.
func (x TwoProportion) LogMidUpper(k int64) float64 { return x.side(k, true, true).logProb() }

// MidLower is P(X < k) + P(X = k)/2 (Lancaster 1961).
func (x TwoProportion) MidLower(k int64) float64 { return x.side(k, false, true).prob() }

// LogMidLower is the logarithm of MidLower.
func (x TwoProportion) LogMidLower(k int64) float64 { return x.side(k, false, true).logProb() }

// CriticalUpper is the smallest k with P(X >= k) <= limit and the size attained there; ok is
// false where no count can signal. See the package's note on sizes that hit a limit exactly.
func (x TwoProportion) CriticalUpper(limit float64) (k int64, size float64, ok bool) {
	return criticalUpper(x, limit)
}

// CriticalLower is the largest k with P(X <= k) <= limit and the size attained there; ok is
// false where no count can signal.
func (x TwoProportion) CriticalLower(limit float64) (k int64, size float64, ok bool) {
	return criticalLower(x, limit)
}

// TwoSided is the two-sided p-value of k, at most 1.
func (x TwoProportion) TwoSided(k int64, how Sides) float64 {
	return twoSided(x.given(k), k, how, false).prob()
}

// LogTwoSided is the logarithm of TwoSided, where TwoSided underflows as well.
func (x TwoProportion) LogTwoSided(k int64, how Sides) float64 {
	return twoSided(x.given(k), k, how, false).logProb()
}

// given is the law of the count once the total with n is known; margin 0 counts as 1.
func (x TwoProportion) given(n int64) FisherNoncentral {
	if !x.valid() || n < 0 || n > x.Trials {
		return FisherNoncentral{Odds: -1}
	}
	m := x.Margin
	if m == 0 {
		m = 1
	}
	return FisherNoncentral{x.Trials, x.RefTrials, n + x.RefEvents, m}
}
