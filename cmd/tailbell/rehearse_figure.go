package main

import (
	"bytes"
	"fmt"
	"image/color"
	"os"
	"path/filepath"
	"strings"

	"gonum.org/v1/plot"
	"gonum.org/v1/plot/plotter"
	"gonum.org/v1/plot/vg"
	"gonum.org/v1/plot/vg/draw"
	"gonum.org/v1/plot/vg/vgimg"
	"gonum.org/v1/plot/vg/vgsvg"

	"tailbell/monitor/rehearse/plant"
)

// drawRehearsal draws the shares found by ratio, with their bounds, above the
// delays with their quartiles.
func drawRehearsal(path string, r *plant.Report) error {
	upper := newPlot(fmt.Sprintf("%s: excesses of shape %s over %s found in time, with %s %% bounds", r.Title, r.Shape, r.Length, trim(100*r.Level)))
	upper.Y.Label.Text, upper.Y.Min, upper.Y.Max = "share found", 0, 1.3
	upper.Y.Tick.Marker = plot.ConstantTicks{{Value: 0, Label: "0"}, {Value: 0.25, Label: "0.25"}, {Value: 0.5, Label: "0.5"}, {Value: 0.75, Label: "0.75"}, {Value: 1, Label: "1"}}
	lower := newPlot("Delay from the excess's beginning to the look: median and quartiles of those found in time")
	lower.Y.Label.Text, lower.X.Label.Text = "days", "ratio to the usual rate"
	ratios := ratiosOf(r)
	var ticks []plot.Tick
	for i, ratio := range ratios {
		ticks = append(ticks, plot.Tick{Value: float64(i), Label: trim(ratio)})
	}
	for i, line := range rehearsalLines(r) {
		style := seriesStyles[i%len(seriesStyles)]
		for _, p := range []*plot.Plot{upper, lower} {
			p.X.Tick.Marker = plot.ConstantTicks(ticks)
			p.X.Min, p.X.Max = -0.5, float64(len(ratios))-0.5
		}
		shift := 0.08 * (float64(i) - float64(len(rehearsalLines(r))-1)/2)
		if err := addSpans(upper, line.name, line.shares(ratios, shift), style); err != nil {
			return err
		}
		if err := addSpans(lower, line.name, line.delays(ratios, shift), style); err != nil {
			return err
		}
	}
	lower.Legend = plot.NewLegend() // the same as above
	return writePlots(path, [][]*plot.Plot{{upper}, {lower}})
}

// seriesStyles tell lines apart by colour and by shape.
var seriesStyles = []draw.GlyphStyle{
	{Color: black, Shape: draw.CircleGlyph{}, Radius: vg.Points(3)},
	{Color: vermillion, Shape: draw.TriangleGlyph{}, Radius: vg.Points(3.5)},
	{Color: blue, Shape: draw.SquareGlyph{}, Radius: vg.Points(3)},
	{Color: green, Shape: draw.CrossGlyph{}, Radius: vg.Points(3)},
	{Color: skyBlue, Shape: draw.PyramidGlyph{}, Radius: vg.Points(3.5)},
	{Color: color.RGBA{0xE6, 0x9F, 0x00, 0xFF}, Shape: draw.RingGlyph{}, Radius: vg.Points(3)},
}

// rehearsalLine is what is found by alerts, or by one window, of one set-up.
type rehearsalLine struct {
	name  string
	found []plant.Found
}

func ratiosOf(r *plant.Report) []float64 {
	var list []float64
	for _, f := range r.Found {
		if f.Setup == 0 && f.Window == "" {
			list = append(list, f.Ratio)
		}
	}
	return list
}

func rehearsalLines(r *plant.Report) []*rehearsalLine {
	var list []*rehearsalLine
	byName := map[string]*rehearsalLine{}
	for _, f := range r.Found {
		name := "alerts"
		if f.Window != "" {
			name = "window " + f.Window
		}
		if len(r.Setups) > 1 {
			name = string(rune('A'+f.Setup)) + " " + name
		}
		if byName[name] == nil {
			byName[name] = &rehearsalLine{name: name}
			list = append(list, byName[name])
		}
		byName[name].found = append(byName[name].found, f)
	}
	return list
}

// span is a value with what reaches under and over it.
type span struct{ x, y, low, high float64 }

func (l *rehearsalLine) shares(_ []float64, shift float64) []span {
	var list []span
	for i, f := range l.found {
		list = append(list, span{float64(i) + shift, f.InTime.Share, f.InTime.Lower, f.InTime.Upper})
	}
	return list
}

func (l *rehearsalLine) delays(_ []float64, shift float64) []span {
	var list []span
	for i, f := range l.found {
		if d := f.Delay; d != nil {
			list = append(list, span{float64(i) + shift, d.Median, d.First, d.Third})
		}
	}
	return list
}

// addSpans draws values with their bounds.
func addSpans(p *plot.Plot, name string, spans []span, style draw.GlyphStyle) error {
	var at plotter.XYs
	for _, s := range spans {
		at = append(at, plotter.XY{X: s.x, Y: s.y})
		bar, err := plotter.NewLine(plotter.XYs{{X: s.x, Y: s.low}, {X: s.x, Y: s.high}})
		if err != nil {
			return err
		}
		bar.Color, bar.Width = style.Color, vg.Points(1)
		p.Add(bar)
	}
	if len(at) == 0 {
		return nil
	}
	points, err := plotter.NewScatter(at)
	if err != nil {
		return err
	}
	points.GlyphStyle = style
	p.Add(points)
	p.Legend.Add(name, points)
	return nil
}

// writePlots writes plots above each other to a file, .svg or .png.
func writePlots(path string, plots [][]*plot.Plot) error {
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
