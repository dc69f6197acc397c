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
)

var bothTails = [...]direction{upper, lower}

func (d direction) name() life.Direction {
	if d == upper {
		return life.Upper
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

// newLaw returns the law of the count for a window of the given exposure at
// the edge of what the baseline and its margin allow in that direction.
func newLaw(cfg *config.Indicator, b *config.Baseline, d direction, exposure float64) law {
	margin := b.Margin
	if d == lower {
		margin = 1 / margin
	}
	if cfg.Measure == config.Proportion {
		trials := int64(exposure)
		if b.Kind == config.Reference {
			return exact.TwoProportion{
				RefEvents: b.Events, RefTrials: int64(b.Exposure.Coef), Trials: trials, Margin: margin,
			}
		}
		return exact.NewBinomial(trials, min(1, b.Rate*margin))
	}
	if b.Kind == config.Reference {
		return exact.TwoRate{
			RefEvents: b.Events, Exposure: exposure, RefExposure: floatOf(b.Exposure), Margin: margin,
		}
	}
	return exact.Poisson{Rate: b.Rate * margin, Exposure: exposure}
}

// testName names the exact test.
func testName(cfg *config.Indicator, b *config.Baseline) string {
	switch {
	case cfg.Measure == config.Proportion && b.Kind == config.Reference && b.Margin != 1:
		return "conditional test of two proportions, margin on the odds ratio (Fisher's noncentral hypergeometric)"
	case cfg.Measure == config.Proportion && b.Kind == config.Reference:
		return "conditional test of two proportions (hypergeometric)"
	case cfg.Measure == config.Proportion:
		return "exact binomial test"
	case b.Kind == config.Reference:
		return "conditional test of two rates (binomial; Przyborowski and Wilenski 1940)"
	}
	return "exact Poisson test"
}

// floatOf returns the decimal as the nearest float64.
func floatOf(d config.Decimal) float64 {
	return Quantity{Lo: d.Coef}.scaled(int(d.Digits))
}

// farBelow reports that the count lies at or under the median of its law, so
// that the upper p-value is at least one half. The medians of the Poisson and
// the binomial lie within one of their means.
func farBelow(cfg *config.Indicator, b *config.Baseline, events int64, exposure float64) bool {
	mean, ok := quickMean(cfg, b, upper, events, exposure)
	return ok && float64(events) <= mean-1
}

// farAbove is the same for the lower tail.
func farAbove(cfg *config.Indicator, b *config.Baseline, events int64, exposure float64) bool {
	mean, ok := quickMean(cfg, b, lower, events, exposure)
	return ok && float64(events) >= mean+1
}

func quickMean(cfg *config.Indicator, b *config.Baseline, d direction, events int64, exposure float64) (float64, bool) {
	margin := b.Margin
	if d == lower {
		margin = 1 / margin
	}
	if b.Kind == config.Known {
		return b.Rate * margin * exposure, b.Rate*margin < 1 || cfg.Measure == config.Rate
	}
	if cfg.Measure == config.Proportion {
		return 0, false
	}
	reference := floatOf(b.Exposure)
	q := margin * exposure / (margin*exposure + reference)
	return float64(events+b.Events) * q, true
}
