// Package figure draws counts over time as SVG pictures, each with a text
// alternative and the numbers behind it.
//
// # Model
//
// A Series is what the looks of one window of one series saw: a count at each
// boundary, what would be usual, and the count at which the look signals. SVG
// draws the counts as a step line under the stair of critical counts, RateSVG
// the rates with their exact bounds, TrendSVG the counts alone as small
// strokes. Rows gives the numbers of either as a table.
//
// # Colours and shapes
//
// The colours are Okabe and Ito's set for all kinds of colour vision ("Color
// Universal Design", 2008). None means anything alone: each kind of line has
// its own dashes, each kind of point its own shape, and every one is named in
// words beside it. Colours stand as attributes, for a picture on its own; a page that
// includes Style takes them from there, in light and in dark.
//
// # Caveats
//
// The same values give the same bytes. Neither ids nor inline styles are used,
// so that pictures can stand side by side in a page with a strict content
// policy. Times are drawn in the zone that they carry.
package figure

import (
	_ "embed"
	"time"
)

// Style is the style sheet for pictures within a page: colours in light and in
// dark, by classes and custom properties that begin with "fig-".
//
//go:embed figure.css
var Style string

// Series is what the looks of one window of one series saw.
type Series struct {
	// Title names the picture: the series and the window.
	Title string
	// Events names what is counted in the plural, Unit what a rate is given
	// in ("per 1,000 device-days"), Window the span of a look ("28 days").
	Events, Unit, Window string
	Points               []Point // by time
	Spans                []Span
	// Width and Height in pixels; 0 for 720 by 260, or 120 by 26 of a trend.
	Width, Height int
}

// Point is one look.
type Point struct {
	// At is the boundary: the end of the window.
	At     time.Time
	Events int64
	// Exposure as it is to be shown.
	Exposure string
	// Expected events by the baseline; NaN for none.
	Expected float64
	// Critical is the count at which the look signals in the upper tail, if
	// HasCritical; Floor that in the lower tail, if HasFloor.
	Critical    int64
	HasCritical bool
	Floor       int64
	HasFloor    bool
	// Made says that the look was made; Why, if it was not, why.
	Made bool
	Why  string
	// Provisional says that some exposure was carried forward, Late that some
	// events came after the look was due.
	Provisional, Late bool
	// Signals in the upper tail; SignalsLow in the lower one.
	Signals, SignalsLow bool
	// Rate with its exact bounds, and the usual rate, all in the same unit;
	// NaN for none.
	Rate, Lower, Upper, Usual float64
}

// SpanKind says what a span of time is.
type SpanKind int

// The kinds of span.
const (
	Alert  SpanKind = iota // an alert signalled
	Real                   // an alert that people marked real
	Change                 // something changed at From
)

// Span is a stretch of time, or with Change a moment, with what it is.
type Span struct {
	Kind     SpanKind
	From, To time.Time
	Text     string
}

// Okabe and Ito's colours, as used on a light ground.
const (
	blue       = "#0072B2"
	vermillion = "#D55E00"
	green      = "#009E73"
	purple     = "#CC79A7"
	ink        = "currentColor"
)
