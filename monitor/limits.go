package monitor

import (
	"tailbell/config"
	"tailbell/monitor/life"
)

// limitsAt returns the limits on p of a look of the window, by direction; 0
// where it never signals.
func (s *series) limitsAt(cfg *config.Indicator, window int, boundary int64) [2]float64 {
	return [2]float64{cfg.PLimit, cfg.PLimit}
}

func (e *Engine) allowanceOf(s *series, cfg *config.Indicator, boundary int64) *life.Allowance {
	return nil
}
