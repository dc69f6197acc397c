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

	"tailbell/monitor/allowance"
)

// drawLimits draws the chance of each window's looks to signal against the
// ratio to the usual rate.
func drawLimits(path string, g *limitsGroup) error {
	r := g.full()
	p := newPlot(fmt.Sprintf("%s: chance of a look to signal (exact), %s false alerts a year at most", g.in.Title, short(r.PerYear)))
	p.X.Label.Text = "ratio to the usual rate in the whole window"
	p.Y.Label.Text = "chance to signal"
	curves, err := g.curves()
	if err != nil {
		return err
	}
	p.Y.Tick.Marker = shareTicks{}
	colours := []color.Color{blue, vermillion, green, black, skyBlue}
	shapes := []draw.GlyphDrawer{draw.CircleGlyph{}, draw.TriangleGlyph{}, draw.SquareGlyph{}, draw.CrossGlyph{}, draw.RingGlyph{}}
	for i, c := range curves {
		var dashes []vg.Length
		if i%2 == 1 {
			dashes = []vg.Length{vg.Points(4), vg.Points(3)}
		}
		if err := addCurve(p, c.name, c.at, colours[i%len(colours)], shapes[i%len(shapes)], dashes); err != nil {
			return err
		}
	}
	p.Y.Max, p.Legend.Top, p.Legend.Left = 1.02, false, false
	var canvas vg.CanvasWriterTo
	const height = figureHeight * 2 / 3
	if strings.EqualFold(filepath.Ext(path), ".svg") {
		canvas = vgsvg.New(figureWidth, height)
	} else {
		canvas = vgimg.PngCanvas{Canvas: vgimg.NewWith(vgimg.UseWH(figureWidth, height), vgimg.UseDPI(figureDPI))}
	}
	p.Draw(draw.New(canvas))
	var out bytes.Buffer
	if _, err := canvas.WriteTo(&out); err != nil {
		return fmt.Errorf("the figure can't be drawn: %w", err)
	}
	return os.WriteFile(path, out.Bytes(), 0o644) //nolint:gosec // a figure is made to be shown
}

// curve is the chance of one window's looks.
type curve struct {
	name string
	at   plotter.XYs
}

func (g *limitsGroup) curves() ([]curve, error) {
	r, q := g.full(), g.questions[g.chosen]
	limits, err := q.Limits()
	if err != nil {
		return nil, err
	}
	far, lower := 2.0, false
	for _, x := range r.Parts {
		lower = lower || x.Tail == "lower" && x.Critical != nil
		for _, f := range x.Found {
			if f.Ratio != nil && x.Tail == "upper" {
				far = max(far, 1.15**f.Ratio)
			}
		}
	}
	near := 1.0
	if lower {
		near = 0
	}
	var list []curve
	for i := range limits.Parts {
		if r.Parts[i].Critical == nil {
			continue
		}
		o := q.Plan.Outlook(&limits, i)
		list = append(list, curve{name: partName(&r.Parts[i]) + ", " + signalsAt(&r.Parts[i]), at: chances(o, near, min(far, 20))})
	}
	return list, nil
}

func chances(o *allowance.Outlook, near, far float64) plotter.XYs {
	const points = 60
	var list plotter.XYs
	for i := range points + 1 {
		ratio := near + (far-near)*float64(i)/points
		list = append(list, plotter.XY{X: ratio, Y: o.Chance(ratio)})
	}
	return list
}

// shareTicks are ticks of a chance, in per cent.
type shareTicks struct{}

// Ticks returns the ticks of an axis of chances.
func (shareTicks) Ticks(_, _ float64) []plot.Tick {
	var ticks []plot.Tick
	for i := range 11 {
		t := plot.Tick{Value: float64(i) / 10}
		if i%2 == 0 || i == 5 {
			t.Label = fmt.Sprintf("%d %%", 10*i)
		}
		ticks = append(ticks, t)
	}
	return ticks
}
