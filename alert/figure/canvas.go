package figure

import (
	"fmt"
	"html"
	"math"
	"strconv"
	"strings"
	"time"
)

// canvas collects the elements of one picture. Its plot lies within the
// margins; x and y turn a time and a value into pixels.
type canvas struct {
	b                        strings.Builder
	width, height            int
	left, right, top, bottom float64
	below                    float64 // room under the key
	from, to                 time.Time
	most                     float64 // the greatest value drawn
}

// begin opens the picture with its text alternative.
func (c *canvas) begin(class, title, description string) {
	fmt.Fprintf(&c.b, `<svg xmlns="http://www.w3.org/2000/svg" class="%s" role="img" viewBox="0 0 %d %d" width="%d" height="%d" font-family="sans-serif" font-size="12">`,
		class, c.width, c.height, c.width, c.height)
	c.b.WriteString("<title>" + html.EscapeString(title) + "</title>")
	if description != "" {
		c.b.WriteString("<desc>" + html.EscapeString(description) + "</desc>")
	}
}

func (c *canvas) end() string {
	c.b.WriteString("</svg>")
	return c.b.String()
}

func (c *canvas) x(at time.Time) float64 {
	span := c.to.Sub(c.from).Seconds()
	if span <= 0 {
		return c.left
	}
	return c.left + (float64(c.width)-c.left-c.right)*at.Sub(c.from).Seconds()/span
}

func (c *canvas) y(value float64) float64 {
	return c.floor() - (c.floor()-c.top)*min(value/c.most, 1)
}

// floor is the height of the axis.
func (c *canvas) floor() float64 { return float64(c.height) - c.bottom }

// edge is the right end of the plot.
func (c *canvas) edge() float64 { return float64(c.width) - c.right }

// px writes a length with one decimal at most.
func px(v float64) string {
	return strconv.FormatFloat(math.Round(v*10)/10, 'f', -1, 64)
}

// line draws a path by its data.
func (c *canvas) path(class, colour, data, more string) {
	if data == "" {
		return
	}
	fmt.Fprintf(&c.b, `<path class="%s" d="%s" fill="none" stroke="%s" %s/>`, class, data, colour, more)
}

// fill draws a filled shape.
func (c *canvas) fill(class, colour, data, more string) {
	if data == "" {
		return
	}
	fmt.Fprintf(&c.b, `<path class="%s" d="%s" fill="%s" %s/>`, class, data, colour, more)
}

func (c *canvas) rule(x1, y1, x2, y2 float64, opacity string) {
	fmt.Fprintf(&c.b, `<path d="M%s %sL%s %s" fill="none" stroke="currentColor" stroke-opacity="%s"/>`, px(x1), px(y1), px(x2), px(y2), opacity)
}

// text writes a word; anchor is start, middle or end.
func (c *canvas) text(x, y float64, anchor, class, colour, words string) {
	fmt.Fprintf(&c.b, `<text class="%s" x="%s" y="%s" text-anchor="%s" fill="%s">%s</text>`,
		class, px(x), px(y), anchor, colour, html.EscapeString(words))
}

// triangle points up above a point, or down below it.
func triangle(x, y float64, up bool) string {
	const half, high = 5, 9
	if up {
		return "M" + px(x-half) + " " + px(y) + "L" + px(x) + " " + px(y-high) + "L" + px(x+half) + " " + px(y) + "Z"
	}
	return "M" + px(x-half) + " " + px(y) + "L" + px(x) + " " + px(y+high) + "L" + px(x+half) + " " + px(y) + "Z"
}

// ring is a small hollow circle, diamond a small square on its corner.
func ring(x, y float64) string {
	const r = 3.2
	return "M" + px(x-r) + " " + px(y) + "a3.2 3.2 0 1 0 6.4 0a3.2 3.2 0 1 0 -6.4 0"
}

func diamond(x, y float64) string {
	const r = 3.6
	return "M" + px(x) + " " + px(y-r) + "L" + px(x+r) + " " + px(y) + "L" + px(x) + " " + px(y+r) + "L" + px(x-r) + " " + px(y) + "Z"
}
