package figure

import (
	"strings"
)

// TrendSVG draws the counts as a row of strokes without axes, those that
// signal with a triangle above, and no stroke but a dot where no look was made.
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
		c.most = max(c.most, float64(s.Points[i].Events))
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
	width := 2.0
	if n > 1 {
		width = min((c.edge()-c.left)/float64(n)*0.5, 2.4)
	}
	c.path("fig-count", blue, strokes.String(), `stroke-width="`+px(width)+`"`)
	c.path("fig-gap", ink, dots.String(), `stroke-opacity="0.6"`)
	c.fill("fig-critical-fill", vermillion, signals.String(), "")
	return c.end()
}
