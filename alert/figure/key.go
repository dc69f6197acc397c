package figure

// sign is a shape with its word, in the line under a picture.
type sign struct {
	shown bool
	draw  func(c *canvas, x, y float64)
	word  string
}

func (s *Series) some(is func(*Point) bool) bool {
	for i := range s.Points {
		if is(&s.Points[i]) {
			return true
		}
	}
	return false
}

func (s *Series) someSpan(c *canvas, k SpanKind) bool {
	for i := range s.Spans {
		if s.Spans[i].Kind == k && s.Spans[i].within(c) {
			return true
		}
	}
	return false
}

// within reports whether something of the span lies in the picture.
func (s *Span) within(c *canvas) bool {
	to := s.To
	if s.Kind == Change {
		to = s.From
	}
	return !s.From.After(c.to) && !to.Before(c.from)
}

// drawKey names the shapes that occur, in one line below the dates.
func (s *Series) drawKey(c *canvas) {
	bracket := func(c *canvas, x, y float64, more string) string {
		return "M" + px(x-6) + " " + px(y+3) + "v-5h12v5" + more
	}
	c.key([]sign{
		{s.some(func(p *Point) bool { return p.Made && p.Signals }), func(c *canvas, x, y float64) {
			c.fill("fig-critical-fill", vermillion, triangle(x, y+4, true), "")
		}, "signals"},
		{s.some(func(p *Point) bool { return p.Made && p.SignalsLow }), func(c *canvas, x, y float64) {
			c.fill("fig-critical-fill", vermillion, triangle(x, y-5, false), "")
		}, "signals: fewer"},
		{s.some(func(p *Point) bool { return p.Made && p.Provisional }), func(c *canvas, x, y float64) {
			c.fill("fig-paper fig-count", "#FFFFFF", ring(x, y), `stroke="`+blue+`" stroke-width="1.4"`)
		}, "provisional"},
		{s.some(func(p *Point) bool { return p.Made && p.Late }), func(c *canvas, x, y float64) {
			c.fill("fig-ink", ink, diamond(x, y), "")
		}, "holds late events"},
		{s.some(func(p *Point) bool { return !p.Made }), func(c *canvas, x, y float64) {
			c.path("fig-gap", ink, "M"+px(x-4)+" "+px(y+3)+"l3 -7m2 7l3 -7", `stroke-opacity="0.8"`)
		}, "no look"},
		{s.someSpan(c, Alert), func(c *canvas, x, y float64) {
			c.path("fig-critical", vermillion, bracket(c, x, y, ""), `stroke-width="2"`)
		}, "alert"},
		{s.someSpan(c, Real), func(c *canvas, x, y float64) {
			c.path("fig-real", purple, bracket(c, x, y, "m-12 -2h12"), `stroke-width="2"`)
		}, "alert marked real"},
		{s.someSpan(c, Change), func(c *canvas, x, y float64) {
			c.path("fig-change", ink, "M"+px(x)+" "+px(y-6)+"v12", `stroke-dasharray="1 3"`)
		}, "change"},
	})
}

func (c *canvas) key(signs []sign) {
	x, y := c.left+6, float64(c.height)-12-c.below
	for _, s := range signs {
		if !s.shown {
			continue
		}
		s.draw(c, x, y)
		c.text(x+11, y+4, "start", "fig-key", ink, s.word)
		x += 30 + 6.3*float64(len(s.word))
	}
}
