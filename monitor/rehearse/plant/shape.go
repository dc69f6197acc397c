package plant

import (
	"fmt"
	"math"
)

// Shape is the course of an excess over its length.
type Shape int

// The shapes: at the full ratio from the first slot to the last; rising evenly
// to it; rising to it and falling again; or coming and going four times.
const (
	Step Shape = iota
	Ramp
	Hump
	Bursts
)

// Shapes are the names of all shapes, in order.
var Shapes = []string{"step", "ramp", "hump", "bursts"}

// ParseShape reads the name of a shape.
func ParseShape(s string) (Shape, error) {
	for i, name := range Shapes {
		if s == name {
			return Shape(i), nil
		}
	}
	return 0, fmt.Errorf("%q is none of the shapes step, ramp, hump and bursts", s)
}

// String returns the shape's name.
func (s Shape) String() string { return Shapes[s] }

// share is how much of the whole excess there is at x, from 0 (its beginning)
// to 1 (its end).
func (s Shape) share(x float64) float64 {
	switch s {
	case Step:
		return 1
	case Ramp:
		return x
	case Hump:
		return 1 - math.Abs(2*x-1)
	case Bursts:
		if _, part := math.Modf(4 * x); part >= 0.5 {
			return 0
		}
		return 1
	}
	return 0
}

// ratio is the ratio to the usual rate in slot i of so many.
func (s Shape) ratio(ratio float64, i, slots int) float64 {
	return 1 + float64((ratio-1)*s.share((float64(i)+0.5)/float64(slots)))
}
