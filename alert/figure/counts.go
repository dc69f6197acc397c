package figure

import (
	"math"
	"strings"
)

const (
	usualWidth  = 720
	usualHeight = 260
)

// frame returns the canvas of a picture with axes.
func (s *Series) frame() *canvas {
	c := &canvas{width: s.Width, height: s.Height, left: 40, right: 86, top: 16, bottom: 52, most: 1}
	if c.width == 0 {
		c.width = usualWidth
	}
	if c.height == 0 {
		c.height = usualHeight
	}
	if n := len(s.Points); n > 0 {
		c.from, c.to = s.Points[0].At, s.Points[n-1].At
	}
	return c
}

// SVG draws the counts of the looks over time under the critical counts, with
// what is usual, the alerts and the changes.
func (s *Series) SVG() string {
	c := s.frame()
	most := 1.0
	for i := range s.Points {
		p := &s.Points[i]
		most = max(most, float64(p.Events))
		if p.HasCritical {
			most = max(most, float64(p.Critical))
		}
		if !math.IsNaN(p.Expected) && !math.IsInf(p.Expected, 0) {
			most = max(most, p.Expected)
		}
	}
	step, top := scale(most*1.04, true)
	c.most = top
	c.begin("fig", s.Title, s.Describe())
	c.rulers(step)
	s.drawSpans(c)
	s.drawCounts(c)
	s.drawPoints(c)
	s.drawKey(c)
	return c.end()
}

// stairs is the path of a value that holds from each point to the next; gaps
// where has reports false.
func (s *Series) stairs(c *canvas, value func(*Point) (float64, bool)) string {
	var b strings.Builder
	open, last := false, 0.0
	for i := range s.Points {
		p := &s.Points[i]
		v, has := value(p)
		if !has {
			open = false
			continue
		}
		x, y := c.x(p.At), c.y(v)
		switch {
		case !open:
			b.WriteString("M" + px(x) + " " + px(y))
		case v == last:
			b.WriteString("H" + px(x))
		default:
			b.WriteString("H" + px(x) + "V" + px(y))
		}
		open, last = true, v
	}
	return b.String()
}

func count(p *Point) (float64, bool)    { return float64(p.Events), p.Made }
func critical(p *Point) (float64, bool) { return float64(p.Critical), p.HasCritical }
func low(p *Point) (float64, bool)      { return float64(p.Floor), p.HasFloor }
func usual(p *Point) (float64, bool)    { return p.Expected, p.Made && !math.IsNaN(p.Expected) }

func (s *Series) drawCounts(c *canvas) {
	c.path("fig-usual", green, s.stairs(c, usual), `stroke-width="1.6" stroke-dasharray="2 3"`)
	c.path("fig-critical", vermillion, s.stairs(c, critical), `stroke-width="1.6" stroke-dasharray="9 3"`)
	c.path("fig-critical", vermillion, s.stairs(c, low), `stroke-width="1.6" stroke-dasharray="9 3 2 3"`)
	c.path("fig-count", blue, s.stairs(c, count), `stroke-width="2.2" stroke-linejoin="round"`)
	c.labels([]label{
		{s.lastOf(count), "counted", "fig-count-fill", blue},
		{s.lastOf(critical), "signals at", "fig-critical-fill", vermillion},
		{s.lastOf(low), "signals at", "fig-critical-fill", vermillion},
		{s.lastOf(usual), "usual", "fig-usual-fill", green},
	})
}

// lastOf is the last value that there is, NaN for none.
func (s *Series) lastOf(value func(*Point) (float64, bool)) float64 {
	for i := len(s.Points) - 1; i >= 0; i-- {
		if v, has := value(&s.Points[i]); has {
			return v
		}
	}
	return math.NaN()
}

// label is a word at the end of a line.
type label struct {
	value        float64
	word         string
	class, color string
}

// labels writes the words beside the ends of their lines, apart from each
// other.
func (c *canvas) labels(all []label) {
	const apart = 13
	var ys []float64
	for _, l := range all {
		if math.IsNaN(l.value) {
			continue
		}
		y := c.y(l.value) + 4
		for moved := true; moved; {
			moved = false
			for _, other := range ys {
				if math.Abs(y-other) < apart {
					y, moved = other-apart, true
				}
			}
		}
		ys = append(ys, y)
		c.text(c.edge()+7, y, "start", l.class, l.color, l.word+" "+plain(math.Round(l.value*10)/10))
	}
}

// drawPoints draws what is particular about single looks.
func (s *Series) drawPoints(c *canvas) {
	var up, down, rings, diamonds, gaps strings.Builder
	for i := range s.Points {
		p := &s.Points[i]
		x, y := c.x(p.At), c.y(float64(p.Events))
		if !p.Made {
			gaps.WriteString("M" + px(x-1.5) + " " + px(c.floor()-2) + "l3 -7")
			continue
		}
		if p.Signals {
			up.WriteString(triangle(x, y-2, true))
		}
		if p.SignalsLow {
			down.WriteString(triangle(x, y+2, false))
		}
		if p.Provisional {
			rings.WriteString(ring(x, y))
		}
		if p.Late {
			diamonds.WriteString(diamond(x, c.floor()))
		}
	}
	c.path("fig-gap", ink, gaps.String(), `stroke-opacity="0.6"`)
	c.fill("fig-paper fig-count", "#FFFFFF", rings.String(), `stroke="`+blue+`" stroke-width="1.4"`)
	c.fill("fig-ink", ink, diamonds.String(), "")
	c.fill("fig-critical-fill", vermillion, up.String(), "")
	c.fill("fig-critical-fill", vermillion, down.String(), "")
}

// drawSpans draws alerts as brackets above the plot, and changes as upright
// lines with their number.
func (s *Series) drawSpans(c *canvas) {
	for i := range s.Spans {
		span := &s.Spans[i]
		if !span.within(c) {
			continue
		}
		x1 := max(c.x(span.From), c.left)
		x2 := min(max(c.x(span.To), x1+3), c.edge())
		y := c.top - 8
		switch span.Kind {
		case Alert:
			c.path("fig-critical", vermillion, "M"+px(x1)+" "+px(y+5)+"V"+px(y)+"H"+px(x2)+"V"+px(y+5), `stroke-width="2"`)
		case Real:
			c.path("fig-real", purple, "M"+px(x1)+" "+px(y+5)+"V"+px(y)+"H"+px(x2)+"V"+px(y+5)+"M"+px(x1)+" "+px(y+3)+"H"+px(x2), `stroke-width="2"`)
		case Change:
			c.path("fig-change", ink, "M"+px(x1)+" "+px(c.top)+"V"+px(c.floor()), `stroke-dasharray="1 4" stroke-opacity="0.8"`)
		}
	}
}
