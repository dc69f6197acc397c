package page

import (
	"math"

	"tailbell/config"
	"tailbell/exact"
	"tailbell/monitor"
)

// rates returns the rate of a look with its exact bounds, and what would be
// usual, in the indicator's unit; NaN for what there is not.
func rates(v *monitor.View, in *config.Indicator) (rate, lower, upper, usual float64) {
	nan := math.NaN()
	exposure := v.Exposure.Float(v.Digits)
	if in == nil || !v.Made || exposure == 0 {
		return nan, nan, nan, nan
	}
	scale := scaleOf(in)
	if in.Measure == config.Proportion {
		trials, ok := v.Exposure.Int64()
		if !ok {
			return nan, nan, nan, nan
		}
		lower, upper = exact.ClopperPearson(v.Events, trials, in.Alpha)
		return float64(v.Events) / exposure * scale, lower * scale, upper * scale, v.Expected / exposure * scale
	}
	lower, upper = exact.Garwood(v.Events, in.Alpha)
	return float64(v.Events) / exposure * scale, lower / exposure * scale, upper / exposure * scale, v.Expected / exposure * scale
}

// scaleOf is by what a rate is multiplied to be shown: proportions of one are
// shown in per cent.
func scaleOf(in *config.Indicator) float64 {
	if in.Measure == config.Proportion && in.Per <= 1 {
		return 100
	}
	if in.Per == 0 {
		return 1
	}
	return in.Per
}
