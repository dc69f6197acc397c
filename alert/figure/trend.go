package figure

import (
	"strings"
)

// TrendSVG draws the counts as a row of strokes without axes, under a dashed
// line at the count at which the latest look signals: those that signal with a
// triangle above, and no stroke but a dot where no look was made.
func (s *Series) TrendSVG() string {
	c := &canvas{width: s.Width, height: s.Height, left: 3, right: 3, top: 10, bottom: 4}
	if c.width == 0 {
		c.width = 120
	}
	if c.height == 0 {
		c.height = 26
	}
	c.most = 1
	for i := range s.Points {
		p := &s.Points[i]
		c.most = max(c.most, float64(p.Events))
		if p.HasCritical {
			c.most = max(c.most, float64(p.Critical))
		}
	}
	c.begin("fig fig-trend", s.Title+": "+s.brief(), "")
	var strokes, signals, dots strings.Builder
	n := len(s.Points)
	for i := range s.Points {
		p := &s.Points[i]
		x := c.left
		if n > 1 {
			x += (c.edge() - c.left) * float64(i) / float64(n-1)
		}
		switch {
		case !p.Made:
			dots.WriteString("M" + px(x) + " " + px(c.floor()) + "h1")
			continue
		case p.Events == 0:
			strokes.WriteString("M" + px(x) + " " + px(c.floor()) + "v-1.5")
		default:
			strokes.WriteString("M" + px(x) + " " + px(c.floor()) + "V" + px(c.y(float64(p.Events))))
		}
		if p.Signals || p.SignalsLow {
			y := c.y(float64(p.Events)) - 2
			signals.WriteString("M" + px(x-3) + " " + px(y) + "l3 -5l3 5Z")
		}
	}
	if i := lastCritical(s.Points); i >= 0 {
		y := px(c.y(float64(s.Points[i].Critical)))
		c.path("fig-critical", vermillion, "M"+px(c.left-2)+" "+y+"H"+px(c.edge()+2), `stroke-width="1" stroke-dasharray="5 3" stroke-opacity="0.8"`)
	}
	width := 2.0
	if n > 1 {
		width = min((c.edge()-c.left)/float64(n)*0.5, 2.4)
	}
	c.path("fig-count", blue, strokes.String(), `stroke-width="`+px(width)+`"`)
	c.path("fig-gap", ink, dots.String(), `stroke-opacity="0.6"`)
	c.fill("fig-critical-fill", vermillion, signals.String(), "")
	return c.end()
}

// lastCritical is the index of the latest point with a critical count, -1 for
// none.
func lastCritical(points []Point) int {
	for i := len(points) - 1; i >= 0; i-- {
		if points[i].HasCritical {
			return i
		}
	}
	return -1
}
