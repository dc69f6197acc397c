package figure

import (
	"math"
	"strings"
)

// RateSVG draws the rates of the looks with their exact bounds as upright
// strokes, and the usual rate beside them.
func (s *Series) RateSVG() string {
	c := s.frame()
	var most float64
	for i := range s.Points {
		p := &s.Points[i]
		if !p.Made || math.IsNaN(p.Rate) {
			continue
		}
		most = max(most, p.Rate)
		if !math.IsNaN(p.Usual) {
			most = max(most, p.Usual)
		}
	}
	bound := most
	for i := range s.Points { // a bound far above all rates is cut off
		if p := &s.Points[i]; p.Made && !math.IsNaN(p.Upper) {
			bound = max(bound, min(p.Upper, 2.5*most))
		}
	}
	step, top := scale(bound*1.04, false)
	c.most = top
	c.begin("fig", "Rates: "+s.Title, s.DescribeRates())
	c.rulers(step)
	s.drawSpans(c)
	s.drawRates(c)
	c.key([]sign{
		{true, func(c *canvas, x, y float64) {
			c.path("fig-count", blue, "M"+px(x)+" "+px(y-7)+"v14", `stroke-width="1.4" stroke-opacity="0.55"`)
		}, "exact bounds"},
		{true, func(c *canvas, x, y float64) {
			c.path("fig-count", blue, "M"+px(x-5)+" "+px(y)+"h10", `stroke-width="2.2"`)
		}, "rate"},
		{s.some(func(p *Point) bool { return p.Upper > top }), func(c *canvas, x, y float64) {
			c.path("fig-count", blue, arrowhead(x, y-4), `stroke-width="1.4"`)
		}, "goes on"},
	})
	return c.end()
}

func rate(p *Point) (float64, bool)      { return p.Rate, p.Made && !math.IsNaN(p.Rate) }
func usualRate(p *Point) (float64, bool) { return p.Usual, p.Made && !math.IsNaN(p.Usual) }

func arrowhead(x, y float64) string {
	return "M" + px(x-3) + " " + px(y+4) + "L" + px(x) + " " + px(y) + "L" + px(x+3) + " " + px(y+4)
}

func (s *Series) drawRates(c *canvas) {
	var strokes, cut strings.Builder
	for i := range s.Points {
		p := &s.Points[i]
		if !p.Made || math.IsNaN(p.Lower) || math.IsNaN(p.Upper) {
			continue
		}
		x := c.x(p.At)
		strokes.WriteString("M" + px(x) + " " + px(c.y(p.Lower)) + "V" + px(c.y(p.Upper)))
		if p.Upper > c.most {
			cut.WriteString(arrowhead(x, c.top))
		}
	}
	width := 1.4
	if n := float64(len(s.Points)); n > 0 {
		width = min(max((c.edge()-c.left)/n*0.6, 0.8), 3)
	}
	c.path("fig-count", blue, strokes.String(), `stroke-width="`+px(width)+`" stroke-opacity="0.35"`)
	c.path("fig-count", blue, cut.String(), `stroke-width="1.4" stroke-opacity="0.7"`)
	c.path("fig-usual", green, s.stairs(c, usualRate), `stroke-width="1.6" stroke-dasharray="2 3"`)
	c.path("fig-count", blue, s.stairs(c, rate), `stroke-width="2.2" stroke-linejoin="round"`)
	c.labels([]label{
		{s.lastOf(rate), "rate", "fig-count-fill", blue},
		{s.lastOf(usualRate), "usual", "fig-usual-fill", green},
	})
}
