package figure

import (
	"fmt"
	"math"
	"strings"

	"tailbell/alert/words"
	"tailbell/exact"
)

// Unit is one unit, such as a ward, over the whole span of a comparison.
type Unit struct {
	Name     string
	Events   int64
	Exposure float64 // trials for a proportion
}

// Funnel holds units against one rate for all, with limits by exposure: a unit
// with little exposure strays further by chance (D. J. Spiegelhalter, "Funnel
// plots for comparing institutional performance", Statistics in Medicine 24
// (2005), 1185-1202). The limits are those of the exact Poisson or binomial
// tails, not of a normal approximation: the curves have the steps of counts,
// and a unit lies on or past one if and only if its tail is at most the level's.
type Funnel struct {
	Title string
	// Events names what is counted in the plural, Exposure what it is counted
	// against, Rate what a rate is given in ("per 1,000 bed-days").
	Events, Exposure, Rate string
	// Per is the multiple of exposure in which rates are shown.
	Per        float64
	Proportion bool
	Units      []Unit
	// Target is the rate per exposure for all, such as a known baseline; 0 takes
	// the pooled one. TargetName names it: "the known baseline".
	Target     float64
	TargetName string
	// Note, if not "", is written under the picture.
	Note string
	// Width and Height in pixels; 0 for 720 by 420.
	Width, Height int
}

// The two-sided levels of the limits, as Spiegelhalter draws them: about two
// and three standard deviations.
const (
	funnelInner = 0.05
	funnelOuter = 0.002
)

// FunnelRow is one unit in numbers.
type FunnelRow struct {
	Unit
	// Rate with exact bounds at 95 % (Garwood; Clopper and Pearson), in
	// multiples of Per.
	Rate, Lower, Upper float64
	// P is the exact two-sided p (the smaller tail doubled) of the unit's count
	// at the rate for all, which is taken as known.
	P float64
	// Outside is 0 within the limits, 1 on or past the 95 % ones, 2 on or past
	// the 99.8 % ones; High tells the side.
	Outside int
	High    bool
}

// Pooled is the rate that units are held against, in multiples of Per: that of
// all together, or the Target.
func (f *Funnel) Pooled() float64 { return f.rate() * f.Per }

func (f *Funnel) rate() float64 {
	if f.Target > 0 {
		return f.Target
	}
	events, exposure := int64(0), 0.0
	for i := range f.Units {
		events += f.Units[i].Events
		exposure += f.Units[i].Exposure
	}
	if exposure == 0 {
		return 0
	}
	return float64(events) / exposure
}

// tails is what limits are read from.
type tails interface {
	Upper(k int64) float64
	Lower(k int64) float64
	CriticalUpper(limit float64) (k int64, size float64, ok bool)
	CriticalLower(limit float64) (k int64, size float64, ok bool)
}

// law is that of the count of a unit with so much exposure.
func (f *Funnel) law(exposure float64) tails {
	if f.Proportion {
		return exact.NewBinomial(int64(math.Round(exposure)), min(f.rate(), 1))
	}
	return exact.Poisson{Rate: f.rate(), Exposure: exposure}
}

// Rows are the units in numbers, in their order.
func (f *Funnel) Rows() []FunnelRow {
	var rows []FunnelRow
	for _, u := range f.Units {
		r := FunnelRow{Unit: u, Rate: math.NaN(), Lower: 0, Upper: math.NaN(), P: 1}
		if u.Exposure > 0 {
			law := f.law(u.Exposure)
			up, down := law.Upper(u.Events), law.Lower(u.Events)
			r.P, r.High = min(1, 2*min(up, down)), up < down
			tail := min(up, down)
			switch {
			case exact.AtMost(tail, funnelOuter/2):
				r.Outside = 2
			case exact.AtMost(tail, funnelInner/2):
				r.Outside = 1
			}
			r.Rate = float64(u.Events) / u.Exposure * f.Per
			if f.Proportion {
				r.Lower, r.Upper = exact.ClopperPearson(u.Events, int64(math.Round(u.Exposure)), 0.05)
			} else {
				r.Lower, r.Upper = exact.Garwood(u.Events, 0.05)
				r.Lower, r.Upper = r.Lower/u.Exposure, r.Upper/u.Exposure
			}
			r.Lower, r.Upper = r.Lower*f.Per, r.Upper*f.Per
		}
		rows = append(rows, r)
	}
	return rows
}

// Against names the rate that units are held against.
func (f *Funnel) Against() string {
	switch {
	case f.Target <= 0:
		return "the rate of all together"
	case f.TargetName != "":
		return f.TargetName
	}
	return "a stated rate"
}

// Describe says in words what SVG shows.
func (f *Funnel) Describe() string {
	rows := f.Rows()
	var high, low []string
	for i := range rows {
		switch {
		case rows[i].Outside == 0:
		case rows[i].High:
			high = append(high, rows[i].Name)
		default:
			low = append(low, rows[i].Name)
		}
	}
	text := fmt.Sprintf("The rate of each of %s against its exposure, with %s, %s %s, and exact limits around it at 95 %% and 99.8 %%.",
		words.Amount(int64(len(rows)), "units"), f.Against(), words.Number(f.Pooled()), f.Rate)
	list := func(what string, names []string) {
		if len(names) > 0 {
			text += " " + what + ": " + strings.Join(names, ", ") + "."
		}
	}
	list("Above a limit", high)
	list("Below a limit", low)
	if len(high)+len(low) == 0 {
		text += " All lie within the limits."
	}
	return text
}

// funnelView turns exposure and rate into pixels.
type funnelView struct {
	*canvas
	far float64 // greatest exposure drawn
}

func (v *funnelView) at(exposure float64) float64 {
	return v.left + (v.edge()-v.left)*exposure/v.far
}

// SVG draws the units, the rate for all and its limits.
func (f *Funnel) SVG() string {
	c := &canvas{width: f.Width, height: f.Height, left: 52, right: 92, top: 16, bottom: 66}
	if c.width == 0 {
		c.width = usualWidth
	}
	if c.height == 0 {
		c.height = 420
	}
	if f.Note != "" {
		c.below, c.bottom = 20, c.bottom+20
	}
	rows := f.Rows()
	v := &funnelView{canvas: c}
	most := 2 * f.Pooled()
	for i := range rows {
		v.far = max(v.far, rows[i].Exposure*1.06)
		if rows[i].Exposure > 0 {
			most = max(most, rows[i].Rate*1.12)
		}
	}
	step, top := scale(most, false)
	c.most = top
	c.begin("fig", f.Title, f.Describe())
	if v.far > 0 {
		v.axes(f, step)
		v.limits(f)
		v.units(rows)
		v.legend(rows)
	}
	if f.Note != "" {
		c.text(8, float64(c.height)-8, "start", "fig-scale", ink, f.Note)
	}
	return c.end()
}

// axes draws the lines of the paper, and both scales.
func (v *funnelView) axes(f *Funnel, step float64) {
	for y := 0.0; y <= v.most+step/1e6; y += step {
		opacity := "0.16"
		if y == 0 {
			opacity = "0.7"
		}
		v.rule(v.left, v.y(y), v.edge(), v.y(y), opacity)
		v.text(v.left-7, v.y(y)+4, "end", "fig-scale", ink, plain(y))
	}
	along, _ := scale(v.far, f.Proportion)
	for x := 0.0; x <= v.far; x += along {
		v.rule(v.at(x), v.floor(), v.at(x), v.floor()+5, "0.7")
		v.text(v.at(x), v.floor()+18, "middle", "fig-scale", ink, plain(x))
	}
	v.text((v.left+v.edge())/2, v.floor()+34, "middle", "fig-scale", ink, f.Exposure+" of a unit; rates "+f.Rate)
}

// limits draws the rate for all, and the critical counts over exposure as
// rates, at every half pixel.
func (v *funnelView) limits(f *Funnel) {
	pooled := f.Pooled()
	word := "all"
	if f.Target > 0 {
		word = "known"
	}
	v.path("fig-usual", green, "M"+px(v.left)+" "+px(v.y(pooled))+"H"+px(v.edge()), `stroke-width="1.8"`)
	v.text(v.edge()+6, v.y(pooled)+4, "start", "fig-usual-fill", green, word+" "+words.Number(pooled))
	for _, level := range []struct {
		alpha        float64
		word, dashes string
	}{{funnelInner, "95 %", "7 3"}, {funnelOuter, "99.8 %", "2 3"}} {
		for _, high := range []bool{true, false} {
			data, end := v.limit(f, level.alpha/2, high)
			v.path("fig-critical", vermillion, data, `stroke-width="1.3" stroke-dasharray="`+level.dashes+`"`)
			if data != "" && end <= v.most {
				v.text(v.edge()+6, v.y(end)+4, "start", "fig-critical-fill", vermillion, level.word)
			}
		}
	}
}

// limit is the path of one limit, and the rate at its end.
func (v *funnelView) limit(f *Funnel, tail float64, high bool) (string, float64) {
	var b strings.Builder
	open, end := false, 0.0
	for x := v.left + 0.5; x <= v.edge(); x += 0.5 {
		exposure := (x - v.left) / (v.edge() - v.left) * v.far
		if f.Proportion {
			exposure = max(math.Floor(exposure), 1)
		}
		law := f.law(exposure)
		k, _, ok := law.CriticalLower(tail)
		if high {
			k, _, ok = law.CriticalUpper(tail)
		}
		rate := float64(k) / exposure * f.Per
		if !ok || rate > v.most {
			open = false
			continue
		}
		letter := "L"
		if !open {
			letter = "M"
		}
		b.WriteString(letter + px(x) + " " + px(v.y(rate)))
		open, end = true, rate
	}
	return b.String(), end
}

// units draws each unit by a shape of what it is, with the names of those
// outside.
func (v *funnelView) units(rows []FunnelRow) {
	var taken []float64
	for i := range rows {
		r := &rows[i]
		if r.Exposure <= 0 {
			continue
		}
		x, y := v.at(r.Exposure), v.y(r.Rate)
		v.unit(r.Outside, x, y, r.High)
		if r.Outside == 0 {
			continue
		}
		anchor, at := "start", x+8
		if x > (v.left+v.edge())/2 {
			anchor, at = "end", x-8
		}
		line := y + 4
		for moved := true; moved; {
			moved = false
			for _, t := range taken {
				if math.Abs(line-t) < 12 {
					line, moved = t-12, true
				}
			}
		}
		taken = append(taken, line)
		v.text(at, line, anchor, "fig-key", ink, r.Name)
	}
}

func (v *funnelView) unit(outside int, x, y float64, high bool) {
	switch outside {
	case 0:
		v.fill("fig-paper fig-count", "#FFFFFF", ring(x, y), `stroke="`+blue+`" stroke-width="1.6"`)
	case 1:
		v.fill("fig-count-fill", blue, diamond(x, y), "")
	default:
		if high {
			y += 4
		} else {
			y -= 4
		}
		v.fill("fig-critical-fill", vermillion, triangle(x, y, high), "")
	}
}

func (v *funnelView) legend(rows []FunnelRow) {
	some := func(outside int) bool {
		for i := range rows {
			if rows[i].Exposure > 0 && rows[i].Outside == outside {
				return true
			}
		}
		return false
	}
	v.key([]sign{
		{some(0), func(_ *canvas, x, y float64) { v.unit(0, x, y, true) }, "within the limits"},
		{some(1), func(_ *canvas, x, y float64) { v.unit(1, x, y, true) }, "on or past 95 %"},
		{some(2), func(_ *canvas, x, y float64) { v.unit(2, x, y, true) }, "on or past 99.8 %"},
	})
}
