package page

import (
	"tailbell/alert/words"
	"tailbell/monitor"
	"tailbell/monitor/life"
)

// unalerted is a series that signals while no alert of that direction does.
type unalerted struct {
	Series, Direction string
	Why               string
}

// addUnalerted keeps a series that signals without an alert, unless there are
// enough.
func (g *glances) addUnalerted(s *monitor.Glance) {
	g.ofUnalerted++
	if len(g.unalerted) == maxUnalerted {
		return
	}
	u := unalerted{
		Series: s.Series, Direction: words.Direction(s.Unalerted[0]),
		Why: "no event has entered a window since it began to signal",
	}
	if s.Unalerted[0] == life.Lower {
		u.Why = "no alert has opened since it began to signal"
	}
	if s.ByHand {
		u.Why = "its alert was closed by hand while it signalled: no other opens before " + g.quietOf(s.Indicator)
	}
	g.unalerted = append(g.unalerted, u)
}

// quietOf says what must happen before another alert of the indicator opens.
func (g *glances) quietOf(indicator string) string {
	if g.setup != nil {
		for i := range g.setup.Indicators {
			switch in := &g.setup.Indicators[i]; {
			case in.Name != indicator:
			case in.Quiet == 1:
				return "a look is quiet"
			default:
				return words.Whole(int64(in.Quiet)) + " looks in a row are quiet"
			}
		}
	}
	return "enough looks in a row are quiet"
}
