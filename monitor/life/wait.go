package life

import "time"

// Wait is the other side of a look that was made when an event came: not how
// many came in the window's time, but how long so many took. It is the same
// finding, for as many events as signal come within the window exactly if the
// wait for them is shorter than the window.
type Wait struct {
	// Previous is when the latest event before this one came; nil where none is
	// remembered, or others came at the same moment.
	Previous *time.Time `json:"previous,omitempty"`
	// Events is the critical count: so many came from First to the look's own
	// event, in Exposure. They are 0 where one event signals.
	Events   int64      `json:"events,omitempty"`
	First    *time.Time `json:"first,omitempty"`
	Exposure string     `json:"exposure,omitempty"`
	// Usual is the exposure that it takes on average from the first to the last
	// of so many events, at the usual rate.
	Usual float64 `json:"usual_exposure,omitempty"`
	// P is the chance that, from one event on, the others come in so little
	// exposure (gamma distribution, exact); nil where the usual rate is estimated,
	// counts have a spread or several came at once: then the wait has another law.
	P *float64 `json:"p,omitempty"`
}
