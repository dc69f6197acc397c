package main

import (
	"bytes"
	"errors"
	"fmt"
	"image/color"
	"math"
	"os"
	"path/filepath"
	"slices"
	"strings"

	"gonum.org/v1/plot"
	"gonum.org/v1/plot/plotter"
	"gonum.org/v1/plot/vg"
	"gonum.org/v1/plot/vg/draw"
	"gonum.org/v1/plot/vg/vgimg"

	"tailbell/alert/figure"
	"tailbell/exact"
)

// unitsFigure gathers the rows of a table for a picture of all units against
// one rate for all.
type unitsFigure struct {
	funnel  figure.Funnel
	kinds   map[bool]bool // rates or proportions
	targets map[float64]bool
	known   int // rows with a known baseline
}

// and returns a function that gathers each row before the next one takes it.
func (u *unitsFigure) and(next func([]string, readRow) error) func([]string, readRow) error {
	return func(header []string, r readRow) error {
		if r.err == nil {
			u.add(header, &r)
		}
		return next(header, r)
	}
}

func (u *unitsFigure) add(header []string, r *readRow) {
	name := fmt.Sprintf("line %d", r.line)
	if i := slices.IndexFunc(header, func(h string) bool { return strings.EqualFold(strings.TrimSpace(h), colUnit) }); i >= 0 && r.fields[i] != "" {
		name = r.fields[i]
	}
	if u.kinds == nil {
		u.kinds, u.targets = map[bool]bool{}, map[float64]bool{}
	}
	a := &r.answer
	u.kinds[a.proportion] = true
	u.funnel.Proportion = a.proportion
	if a.hasBaseline {
		u.known++
		u.targets[a.baseline] = true
	}
	u.funnel.Units = append(u.funnel.Units, figure.Unit{Name: name, Events: a.events, Exposure: a.size})
}

// write draws the picture into a file. Units are held against their known
// baseline, if all have the same one, else against the rate of all together.
func (u *unitsFigure) write(path string, o *exactOptions) error {
	f := &u.funnel
	switch {
	case len(f.Units) == 0:
		return errors.New("--figure: there is no row that could be drawn")
	case len(u.kinds) > 1:
		return errors.New("--figure: the rows are of rates and of proportions, which have no picture in common")
	}
	if f.Title = "All units, against the rate of all together"; len(u.targets) == 1 && u.known == len(f.Units) {
		for target := range u.targets {
			f.Title, f.Target, f.TargetName = "All units, against the known baseline", target/o.per, "the known baseline"
		}
	}
	f.Note = figureCaution
	f.Events, f.Exposure, f.Per = "events", "units of exposure", o.per
	if f.Proportion {
		f.Exposure = "trials"
	}
	f.Rate = fmt.Sprintf("per %s %s", trim(o.per), f.Exposure)
	if o.per == 1 {
		f.Rate = "per " + strings.TrimSuffix(strings.Replace(f.Exposure, "units", "unit", 1), "s")
	}
	if strings.EqualFold(filepath.Ext(path), ".svg") {
		return os.WriteFile(path, []byte(f.SVG()), 0o644) //nolint:gosec // a figure is made to be shown
	}
	return drawFunnel(path, f)
}

// drawFunnel draws the picture as dots of an image, with the same limits.
func drawFunnel(path string, f *figure.Funnel) error {
	p := newPlot(f.Title)
	p.X.Label.Text, p.Y.Label.Text = f.Exposure+"\n"+f.Note, f.Events+" "+f.Rate
	p.Y.Tick.Marker = plot.DefaultTicks{}
	p.X.Min = 0
	most := 0.0
	rows := f.Rows()
	for i := range rows {
		most = max(most, rows[i].Exposure)
	}
	rate := f.Pooled() / f.Per
	level, err := plotter.NewLine(plotter.XYs{{X: 0, Y: rate * f.Per}, {X: most * 1.05, Y: rate * f.Per}})
	if err != nil {
		return err
	}
	level.Color = black
	p.Add(level)
	p.Legend.Add(fmt.Sprintf("%s: %s", f.Against(), short(rate*f.Per)), level)
	for _, x := range []struct {
		share  float64
		name   string
		dashes []vg.Length
	}{{0.05, "95 % limits, exact", []vg.Length{vg.Points(5), vg.Points(3)}}, {0.002, "99.8 % limits, exact", nil}} {
		for _, high := range []bool{true, false} {
			line, err := plotter.NewLine(limitLine(f, rate, x.share, high, most*1.05))
			if err != nil {
				return err
			}
			line.Color, line.Dashes = blue, x.dashes
			p.Add(line)
			if high {
				p.Legend.Add(x.name, line)
			}
		}
	}
	for outside, look := range []struct {
		name   string
		colour color.RGBA
		shape  draw.GlyphDrawer
	}{{"within", black, draw.CircleGlyph{}}, {"past the 95 % limits", skyBlue, draw.SquareGlyph{}}, {"past the 99.8 % limits", vermillion, draw.PyramidGlyph{}}} {
		if err := addUnits(p, rows, outside, look.name, look.colour, look.shape); err != nil {
			return err
		}
	}
	canvas := vgimg.PngCanvas{Canvas: vgimg.NewWith(vgimg.UseWH(figureWidth, 6*vg.Inch), vgimg.UseDPI(figureDPI))}
	p.Draw(draw.New(canvas))
	var out bytes.Buffer
	if _, err := canvas.WriteTo(&out); err != nil {
		return fmt.Errorf("the figure can't be drawn: %w", err)
	}
	return os.WriteFile(path, out.Bytes(), 0o644) //nolint:gosec // a figure is made to be shown
}

// limitLine is where a unit of so much exposure lies on the limit whose two
// tails together have the share: the rate of the least count that has a tail of
// half of it, or less.
func limitLine(f *figure.Funnel, rate, share float64, high bool, most float64) plotter.XYs {
	var line plotter.XYs
	const steps = 2000
	for i := 1; i <= steps; i++ {
		exposure := most * float64(i) / steps
		if f.Proportion {
			if exposure = math.Round(exposure); exposure < 1 || len(line) > 0 && line[len(line)-1].X == exposure {
				continue
			}
		}
		var law interface {
			CriticalUpper(limit float64) (int64, float64, bool)
			CriticalLower(limit float64) (int64, float64, bool)
		} = exact.Poisson{Rate: rate, Exposure: exposure}
		if f.Proportion {
			law = exact.NewBinomial(int64(exposure), min(rate, 1))
		}
		critical := law.CriticalUpper
		if !high {
			critical = law.CriticalLower
		}
		if k, _, ok := critical(share / 2); ok && float64(k)/exposure <= 8*rate {
			line = append(line, plotter.XY{X: exposure, Y: float64(k) / exposure * f.Per})
		}
	}
	if len(line) == 0 {
		line = plotter.XYs{{X: 0, Y: rate * f.Per}}
	}
	return line
}

// addUnits adds the units that lie so far outside, those with names that do.
func addUnits(p *plot.Plot, rows []figure.FunnelRow, outside int, name string, colour color.RGBA, shape draw.GlyphDrawer) error {
	var at plotter.XYs
	var names []string
	for i := range rows {
		if r := &rows[i]; r.Outside == outside && r.Exposure > 0 {
			at = append(at, plotter.XY{X: r.Exposure, Y: r.Rate})
			names = append(names, r.Name)
		}
	}
	if len(at) == 0 {
		return nil
	}
	dots, err := plotter.NewScatter(at)
	if err != nil {
		return err
	}
	dots.GlyphStyle = draw.GlyphStyle{Color: colour, Radius: vg.Points(3.5), Shape: shape}
	p.Add(dots)
	p.Legend.Add(name, dots)
	if outside == 0 {
		return nil
	}
	labels, err := plotter.NewLabels(plotter.XYLabels{XYs: at, Labels: names})
	if err != nil {
		return err
	}
	labels.Offset = vg.Point{X: vg.Points(6), Y: vg.Points(-3)}
	p.Add(labels)
	return nil
}
