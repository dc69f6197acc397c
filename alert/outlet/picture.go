package outlet

import (
	"bytes"
	"fmt"
	"image/color"
	"io"
	"math"
	"strconv"

	"gonum.org/v1/plot"
	"gonum.org/v1/plot/font"
	"gonum.org/v1/plot/text"
	"gonum.org/v1/plot/vg"
	"gonum.org/v1/plot/vg/draw"
	"gonum.org/v1/plot/vg/vgimg"
	"gonum.org/v1/plot/vg/vgsvg"

	"tailbell/alert/words"
	"tailbell/config"
	"tailbell/monitor/life"
)

// Colours of Okabe and Ito's palette (2008), safe for the colour-blind. Each
// goes with a shape and a word.
var (
	usualColour   = color.RGBA{0x00, 0x72, 0xB2, 0xFF} // blue, a circle
	countedColour = color.RGBA{0xD5, 0x5E, 0x00, 0xFF} // vermillion, a triangle
	ink           = color.RGBA{0x22, 0x22, 0x22, 0xFF}
	faint         = color.RGBA{0xBB, 0xBB, 0xBB, 0xFF}
)

const (
	pictureWidth = 6.2 * vg.Inch
	rowHeight    = 0.95 * vg.Inch
	axisHeight   = 0.42 * vg.Inch
	pictureDPI   = 144
	pictureRows  = 4
)

// Picture draws where the counts of an alert lie: a line for each look that the
// record tells of, the latest ones, with the usual count, the count at which
// the look signals, and what was counted. It returns nil without an error where
// the record has no look.
func Picture(r *life.Record, form config.Picture) ([]byte, error) {
	looks := looksOf(r)
	if len(looks) == 0 || form == config.NoPicture {
		return nil, nil
	}
	height := vg.Length(len(looks))*rowHeight + axisHeight
	var canvas interface {
		vg.CanvasSizer
		io.WriterTo
	}
	if form == config.SVG {
		canvas = vgsvg.New(pictureWidth, height)
	} else {
		canvas = vgimg.PngCanvas{Canvas: vgimg.NewWith(vgimg.UseWH(pictureWidth, height), vgimg.UseDPI(pictureDPI), vgimg.UseBackgroundColor(color.White))}
	}
	p := painter{Canvas: draw.New(canvas)}
	p.scale(looks)
	for i, l := range looks {
		p.row(r, l, height-vg.Length(i)*rowHeight)
	}
	p.axis(looks[0].evidence.EventNoun)
	var b bytes.Buffer
	if _, err := canvas.WriteTo(&b); err != nil {
		return nil, fmt.Errorf("drawing alert %s: %w", r.ID, err)
	}
	return b.Bytes(), nil
}

// PictureText says what the picture shows.
func PictureText(r *life.Record) string {
	text := ""
	for _, l := range looksOf(r) {
		text += fmt.Sprintf("%s, %s: counted %d, usual about %s, signals at %d. ", l.what, words.Span(r, l.evidence),
			l.evidence.Events, words.Expected(l.evidence), l.evidence.Critical)
	}
	return text
}

// drawnLook is a look of the record with what it did.
type drawnLook struct {
	what     string
	evidence *life.Evidence
}

// looksOf are the looks of which the record tells, the opening one first and the
// strongest last.
func looksOf(r *life.Record) []drawnLook {
	var looks []drawnLook
	if r.Opening.Window != "" {
		looks = append(looks, drawnLook{"opened", &r.Opening})
	}
	if w := &r.Worst; w.Window != "" && (w.Window != r.Opening.Window || !w.Due.Equal(r.Opening.Due)) {
		looks = append(looks, drawnLook{"strongest", w})
	}
	if n := len(r.Steps); n > 0 {
		if e := r.Steps[n-1].Evidence; e != nil && !e.Due.Equal(r.Opening.Due) && !e.Due.Equal(r.Worst.Due) {
			looks = append(looks, drawnLook{string(r.Steps[n-1].Kind), e})
		}
	}
	return looks[:min(len(looks), pictureRows)]
}

// painter draws with a scale of counts.
type painter struct {
	draw.Canvas
	least, most, step float64
}

// scale finds a scale that holds every mark, from 0 unless all lie far from it.
func (p *painter) scale(looks []drawnLook) {
	lo, hi := math.Inf(1), 0.0
	for _, l := range looks {
		for _, v := range []float64{l.evidence.Expected, float64(l.evidence.Events), float64(l.evidence.Critical)} {
			lo, hi = min(lo, v), max(hi, v)
		}
	}
	if span := hi - lo; lo > 20 && span < lo/2 {
		p.least = max(0, lo-span/2-1)
	}
	hi += max(1, (hi-p.least)*0.12)
	p.step = math.Pow(10, math.Floor(math.Log10((hi-p.least)/4)))
	for _, f := range []float64{1, 2, 5, 10} {
		if (hi-p.least)/(p.step*f) <= 6 {
			p.step *= f
			break
		}
	}
	p.step = max(p.step, 1)
	p.least = math.Floor(p.least/p.step) * p.step
	p.most = math.Ceil(hi/p.step) * p.step
}

const margin = 0.3 * vg.Inch

func (p *painter) x(v float64) vg.Length {
	width := p.Max.X - p.Min.X - 2*margin
	return p.Min.X + margin + width*vg.Length((v-p.least)/(p.most-p.least))
}

func (p *painter) style(size font.Length, align text.XAlignment) text.Style {
	f := plot.DefaultFont
	f.Variant, f.Size = "Sans", size
	return text.Style{Color: ink, Font: f, XAlign: align, YAlign: text.YBottom, Handler: plot.DefaultTextHandler}
}

// row draws one look below the height top.
func (p *painter) row(r *life.Record, l drawnLook, top vg.Length) {
	e := l.evidence
	p.FillText(p.style(8.5, text.XLeft), vg.Point{X: p.x(p.least), Y: top - 12}, l.what+": "+words.Span(r, e))
	y := top - 0.55*vg.Inch
	p.StrokeLine2(draw.LineStyle{Color: faint, Width: 1}, p.x(p.least), y, p.x(p.most), y)
	critical := p.x(float64(e.Critical))
	p.StrokeLine2(draw.LineStyle{Color: ink, Width: 1.5, Dashes: []vg.Length{3, 2}}, critical, y-9, critical, y+9)
	p.mark(draw.GlyphStyle{Color: usualColour, Radius: 4.5, Shape: draw.CircleGlyph{}}, e.Expected, y)
	shape := draw.GlyphDrawer(draw.PyramidGlyph{})
	if r.Direction == life.Lower {
		shape = downGlyph{}
	}
	p.mark(draw.GlyphStyle{Color: countedColour, Radius: 6, Shape: shape}, float64(e.Events), y)
	p.label(e.Expected, y-20, "usual about "+words.Expected(e))
	p.label(float64(e.Events), y+11, words.Whole(e.Events)+" counted")
	below := vg.Length(20)
	if near := math.Abs(float64(e.Critical)-e.Expected) / (p.most - p.least); near < 0.25 {
		below = 31
	}
	p.label(float64(e.Critical), y-below, "signals at "+words.Whole(e.Critical))
}

func (p *painter) mark(g draw.GlyphStyle, v float64, y vg.Length) {
	p.DrawGlyphNoClip(g, vg.Point{X: p.x(v), Y: y})
}

// label writes beside a value, so that it stays on the picture.
func (p *painter) label(v float64, y vg.Length, words string) {
	align := text.XCenter
	switch part := (v - p.least) / (p.most - p.least); {
	case part < 0.1:
		align = text.XLeft
	case part > 0.9:
		align = text.XRight
	}
	p.FillText(p.style(8.5, align), vg.Point{X: p.x(v), Y: y}, words)
}

// axis draws the scale at the bottom.
func (p *painter) axis(noun string) {
	y := p.Min.Y + 0.3*vg.Inch
	p.StrokeLine2(draw.LineStyle{Color: ink, Width: 0.7}, p.x(p.least), y, p.x(p.most), y)
	for v := p.least; v <= p.most+p.step/2; v += p.step {
		p.StrokeLine2(draw.LineStyle{Color: ink, Width: 0.7}, p.x(v), y, p.x(v), y-3)
		p.FillText(p.style(8, text.XCenter), vg.Point{X: p.x(v), Y: y - 13}, words.Grouped(strconv.FormatFloat(v, 'f', -1, 64)))
	}
	p.FillText(p.style(8, text.XRight), vg.Point{X: p.x(p.most), Y: y + 3}, noun)
}

// downGlyph is a triangle that points down.
type downGlyph struct{}

// DrawGlyph draws it.
func (downGlyph) DrawGlyph(c *draw.Canvas, sty draw.GlyphStyle, pt vg.Point) {
	r := sty.Radius
	c.FillPolygon(sty.Color, []vg.Point{{X: pt.X, Y: pt.Y - r}, {X: pt.X - r*0.9, Y: pt.Y + r*0.6}, {X: pt.X + r*0.9, Y: pt.Y + r*0.6}})
}
