package main

import (
	"bytes"
	"fmt"
	"image/color"
	"math"
	"os"
	"path/filepath"
	"strings"

	"gonum.org/v1/plot"
	"gonum.org/v1/plot/font"
	"gonum.org/v1/plot/plotter"
	"gonum.org/v1/plot/text"
	"gonum.org/v1/plot/vg"
	"gonum.org/v1/plot/vg/draw"
	"gonum.org/v1/plot/vg/vgimg"
	"gonum.org/v1/plot/vg/vgsvg"

	"tailbell/monitor/estimate"
)

// Colours of Okabe and Ito's palette (2008), safe for the colour-blind.
var (
	skyBlue    = color.RGBA{0x56, 0xB4, 0xE9, 0xFF}
	blue       = color.RGBA{0x00, 0x72, 0xB2, 0xFF}
	vermillion = color.RGBA{0xD5, 0x5E, 0x00, 0xFF}
	green      = color.RGBA{0x00, 0x9E, 0x73, 0xFF}
	black      = color.RGBA{0, 0, 0, 0xFF}
)

// The figure's size.
const (
	figureWidth  = 9 * vg.Inch
	figureHeight = 7 * vg.Inch
	figureDPI    = 150
)

// figureCaution stands under every picture that goes into a file of its own.
const figureCaution = "A signal is a statistical finding, not a diagnosis and not a cause. Silence is no proof of safety. Local policy decides."

// checkFigure refuses a file of a kind that can't be drawn.
func checkFigure(path string) error {
	switch strings.ToLower(filepath.Ext(path)) {
	case ".svg", ".png":
		return nil
	}
	if path == "" {
		return nil
	}
	return &usageError{fmt.Errorf("--figure %s: the file's name must end in .svg or .png", path)}
}

// drawBaseline draws counts by period above the distribution of the counts in
// the first window.
func drawBaseline(path string, h *estimate.History, r *estimate.Report) error {
	upper, err := periodPlot(h, r)
	if err != nil {
		return err
	}
	plots := [][]*plot.Plot{{upper}}
	if len(r.Windows) > 0 {
		lower, err := windowPlot(h, r.Windows[0])
		if err != nil {
			return err
		}
		plots = append(plots, []*plot.Plot{lower})
	}
	last := plots[len(plots)-1][0]
	last.X.Label.Text = strings.TrimPrefix(last.X.Label.Text+"\n"+figureCaution, "\n")
	var canvas vg.CanvasWriterTo
	if strings.EqualFold(filepath.Ext(path), ".svg") {
		canvas = vgsvg.New(figureWidth, figureHeight)
	} else {
		canvas = vgimg.PngCanvas{Canvas: vgimg.NewWith(vgimg.UseWH(figureWidth, figureHeight), vgimg.UseDPI(figureDPI))}
	}
	tiles := draw.Tiles{Rows: len(plots), Cols: 1, PadY: vg.Points(14), PadTop: vg.Points(6), PadBottom: vg.Points(6), PadLeft: vg.Points(6), PadRight: vg.Points(10)}
	areas := plot.Align(plots, tiles, draw.New(canvas))
	for i := range plots {
		plots[i][0].Draw(areas[i][0])
	}
	var out bytes.Buffer
	if _, err := canvas.WriteTo(&out); err != nil {
		return fmt.Errorf("the figure can't be drawn: %w", err)
	}
	return os.WriteFile(path, out.Bytes(), 0o644) //nolint:gosec // a figure is made to be shown
}

func newPlot(title string) *plot.Plot {
	p := plot.New()
	p.Title.Text = title
	p.Title.TextStyle.Font.Size = font.Points(11)
	p.Title.Padding = vg.Points(4)
	for _, a := range []*plot.Axis{&p.X, &p.Y} {
		a.Label.TextStyle.Font.Size = font.Points(9)
		a.Tick.Label.Font.Size = font.Points(8)
	}
	p.Legend.Top = true
	p.Legend.TextStyle.Font.Size = font.Points(8)
	p.Y.Min = 0
	p.Y.Tick.Marker = wholeTicks{}
	return p
}

// wholeTicks are plot's ticks without those that are no whole numbers.
type wholeTicks struct{}

// Ticks returns the ticks of an axis of counts.
func (wholeTicks) Ticks(low, high float64) []plot.Tick {
	var ticks []plot.Tick
	for _, t := range (plot.DefaultTicks{}).Ticks(low, high) {
		if t.Value == math.Trunc(t.Value) {
			if t.Label != "" {
				t.Label = thousands(int64(t.Value))
			}
			ticks = append(ticks, t)
		}
	}
	return ticks
}

// periodPlot draws the events of each period as bars, what was to be expected
// as a line, and the influence of those that stand out.
func periodPlot(h *estimate.History, r *estimate.Report) (*plot.Plot, error) {
	in, s := h.Indicator, r.Stability
	p := newPlot(fmt.Sprintf("%s: %s by %s, %s to before %s", in.Title, in.EventNoun, s.Length, r.From.Format("2006-01-02"), r.To.Format("2006-01-02")))
	p.Y.Label.Text = in.EventNoun
	var usual, apart []bar1
	var expected plotter.XYs
	var marks plotter.XYs
	var labels []string
	for i, x := range s.Periods {
		b := bar1{at: float64(i), height: float64(x.Events)}
		if x.Marked {
			apart = append(apart, b)
			marks = append(marks, plotter.XY{X: b.at, Y: b.height})
			labels = append(labels, fmt.Sprintf("%+.1f%%", 100*x.Influence))
		} else {
			usual = append(usual, b)
		}
		expected = append(expected, plotter.XY{X: b.at - 0.5, Y: x.Expected}, plotter.XY{X: b.at + 0.5, Y: x.Expected})
	}
	p.Add(bars{usual, skyBlue})
	p.Legend.Add("events", bars{colour: skyBlue})
	if len(apart) > 0 {
		p.Add(bars{apart, vermillion})
		p.Legend.Add("stands out; with what it does to the rate", bars{colour: vermillion})
		if err := addMarks(p, marks, labels); err != nil {
			return nil, err
		}
	}
	line, err := plotter.NewLine(expected)
	if err != nil {
		return nil, err
	}
	line.Color, line.Width = black, vg.Points(1)
	p.Add(line)
	p.Legend.Add("expected at one rate", line)
	p.X.Tick.Marker = plot.ConstantTicks(periodTicks(h, s.Length, s.Periods))
	p.X.Min, p.X.Max = -0.7, float64(len(s.Periods))-0.3
	p.Y.Max *= 1.25
	return p, nil
}

func addMarks(p *plot.Plot, at plotter.XYs, labels []string) error {
	points, err := plotter.NewScatter(at)
	if err != nil {
		return err
	}
	points.GlyphStyle = draw.GlyphStyle{Color: vermillion, Radius: vg.Points(3), Shape: draw.TriangleGlyph{}}
	words, err := plotter.NewLabels(plotter.XYLabels{XYs: at, Labels: labels})
	if err != nil {
		return err
	}
	for i := range words.TextStyle {
		words.TextStyle[i].Font.Size = font.Points(7)
		words.TextStyle[i].XAlign = text.XCenter
	}
	words.Offset = vg.Point{Y: vg.Points(5)}
	p.Add(points, words)
	return nil
}

// periodTicks labels about ten of the periods.
func periodTicks(h *estimate.History, length string, periods []estimate.Period) []plot.Tick {
	layout := "2006-01-02"
	switch {
	case strings.HasSuffix(length, "mo"):
		layout = "2006-01"
	case strings.HasSuffix(length, "y"):
		layout = "2006"
	}
	every := (len(periods) + 9) / 10
	var ticks []plot.Tick
	for i := range periods {
		t := plot.Tick{Value: float64(i)}
		if i%every == 0 {
			t.Label = periods[i].Start.Time().In(h.Indicator.Zone).Format(layout)
		}
		ticks = append(ticks, t)
	}
	return ticks
}

// windowPlot draws how many windows held so many events, beside what the models
// expect.
func windowPlot(h *estimate.History, w *estimate.Windows) (*plot.Plot, error) {
	title := fmt.Sprintf("Windows of %s: how many held so many events", w.Window)
	if w.Of > w.Count {
		title += fmt.Sprintf(" (%s, thinned from %s)", thousands(int64(w.Count)), thousands(int64(w.Of)))
	}
	p := newPlot(title)
	p.X.Label.Text = h.Indicator.EventNoun + " in a window"
	p.Y.Label.Text = "windows"
	var seen []bar1
	var chance, spread plotter.XYs
	var ticks []plot.Tick
	every := (len(w.Shares) + 11) / 12
	for i, s := range w.Shares {
		x := float64(i)
		seen = append(seen, bar1{x, s.Seen})
		chance = append(chance, plotter.XY{X: x, Y: s.Chance})
		spread = append(spread, plotter.XY{X: x, Y: s.Spread})
		t := plot.Tick{Value: x}
		if i%every == 0 || i == len(w.Shares)-1 {
			t.Label = shareLabel(s)
		}
		ticks = append(ticks, t)
	}
	p.Add(bars{seen, skyBlue})
	p.Legend.Add("seen", bars{colour: skyBlue})
	if err := addCurve(p, "by chance alone", chance, blue, draw.CircleGlyph{}, nil); err != nil {
		return nil, err
	}
	if w.Phi > 1 {
		dashes := []vg.Length{vg.Points(4), vg.Points(3)}
		if err := addCurve(p, "with a spread of "+short(w.Phi), spread, green, draw.SquareGlyph{}, dashes); err != nil {
			return nil, err
		}
	}
	p.X.Tick.Marker = plot.ConstantTicks(ticks)
	p.X.Min, p.X.Max = -0.7, float64(len(w.Shares))-0.3
	return p, nil
}

func shareLabel(s estimate.Share) string {
	switch {
	case s.Most < 0:
		return fmt.Sprintf("%d+", s.Least)
	case s.Most > s.Least:
		return fmt.Sprintf("%d-%d", s.Least, s.Most)
	}
	return fmt.Sprint(s.Least)
}

func addCurve(p *plot.Plot, name string, at plotter.XYs, c color.Color, shape draw.GlyphDrawer, dashes []vg.Length) error {
	line, points, err := plotter.NewLinePoints(at)
	if err != nil {
		return err
	}
	line.Color, line.Width, line.Dashes = c, vg.Points(1.2), dashes
	points.GlyphStyle = draw.GlyphStyle{Color: c, Radius: vg.Points(2.5), Shape: shape}
	p.Add(line, points)
	p.Legend.Add(name, line, points)
	return nil
}

// bar1 is one bar over a position.
type bar1 struct{ at, height float64 }

// bars draws bars at any positions, and their colour in the legend.
type bars struct {
	all    []bar1
	colour color.Color
}

// Plot draws the bars.
func (b bars) Plot(c draw.Canvas, p *plot.Plot) {
	x, y := p.Transforms(&c)
	for _, one := range b.all {
		left, right := x(one.at-0.42), x(one.at+0.42)
		bottom, top := y(0), y(one.height)
		c.FillPolygon(b.colour, c.ClipPolygonXY([]vg.Point{{X: left, Y: bottom}, {X: right, Y: bottom}, {X: right, Y: top}, {X: left, Y: top}}))
	}
}

// DataRange says what the axes must hold.
func (b bars) DataRange() (xmin, xmax, ymin, ymax float64) {
	xmin, xmax = math.Inf(1), math.Inf(-1)
	for _, one := range b.all {
		xmin, xmax = min(xmin, one.at-0.5), max(xmax, one.at+0.5)
		ymax = max(ymax, one.height)
	}
	return xmin, xmax, 0, ymax
}

// Thumbnail draws the colour.
func (b bars) Thumbnail(c *draw.Canvas) {
	r := c.Rectangle
	c.FillPolygon(b.colour, []vg.Point{r.Min, {X: r.Max.X, Y: r.Min.Y}, r.Max, {X: r.Min.X, Y: r.Max.Y}})
}
