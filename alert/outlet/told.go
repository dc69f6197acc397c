package outlet

import (
	"math"
	"slices"

	"tailbell/config"
	"tailbell/monitor/life"
)

// Wants returns which steps an outlet of the set-up is told (Queue's Wants).
func Wants(o *config.Outlet) func(*life.Notice) bool {
	t := &o.Told
	return func(n *life.Notice) bool {
		r := &n.Record
		switch {
		case n.To != "" && n.To != o.Name, n.History && !t.History, n.Quiet():
			return false
		case len(t.Indicators) > 0 && !slices.Contains(t.Indicators, r.Indicator):
			return false
		case len(t.Series) > 0 && !slices.ContainsFunc(t.Series, func(p config.Pattern) bool { return p.Match(r.Series) }):
			return false
		case r.Direction == life.Upper && !t.Upper, r.Direction == life.Lower && !t.Lower:
			return false
		case t.PAtMost > 0 && r.Silence == nil && r.Worst.Log10P > math.Log10(t.PAtMost):
			return false
		}
		return len(t.Steps) == 0 || slices.Contains(t.Steps, string(n.Step.Kind))
	}
}
