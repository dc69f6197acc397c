package rehearse

import (
	"strconv"
	"time"
)

// Element is one observation as a publisher means it, or rubbish.
type Element struct {
	Series    string
	ID        string
	Revision  int64 // written if there is an id; 0 is left out
	Retracted bool
	// Start and End bound the interval (half-open); for an instant they are
	// equal.
	Start, End  time.Time
	Events      int64
	HasEvents   bool
	Exposure    Amount
	HasExposure bool
	// Reported is when it was first reported.
	Reported time.Time
	// Sent is when it is published; equal to Reported unless it is sent again.
	Sent time.Time
	// Raw is what is published instead of the fields, for rubbish. Fault is
	// the reason for which a reader must refuse it.
	Raw   []byte
	Fault string
	// Alone: it is a message by itself.
	Alone bool
	// Meant is what should become of it when it arrives, as the one who
	// planted it sees it.
	Meant Class
}

// JSON returns the element as published.
func (e *Element) JSON() []byte {
	if e.Raw != nil {
		return e.Raw
	}
	b := make([]byte, 0, 224)
	b = append(b, '{')
	if e.ID != "" {
		b = appendText(b, "id", e.ID)
	}
	b = appendText(b, "series", e.Series)
	switch {
	case e.Retracted:
	case e.Start.Equal(e.End):
		b = appendTime(b, "at", e.Start)
	default:
		b = appendTime(b, "start", e.Start)
		b = appendTime(b, "end", e.End)
	}
	if e.HasEvents {
		b = appendName(b, "events")
		b = strconv.AppendInt(b, e.Events, 10)
	}
	if e.HasExposure {
		b = appendName(b, "exposure")
		b = append(b, e.Exposure.String()...)
	}
	if e.ID != "" && e.Revision != 0 {
		b = appendName(b, "revision")
		b = strconv.AppendInt(b, e.Revision, 10)
	}
	if e.Retracted {
		b = appendName(b, "retracted")
		b = append(b, "true"...)
	}
	b = appendTime(b, "reported", e.Reported)
	return append(b, '}')
}

func appendName(b []byte, name string) []byte {
	if b[len(b)-1] != '{' {
		b = append(b, ',')
	}
	b = append(b, '"')
	b = append(b, name...)
	return append(b, '"', ':')
}

func appendText(b []byte, name, value string) []byte {
	return strconv.AppendQuote(appendName(b, name), value)
}

func appendTime(b []byte, name string, t time.Time) []byte {
	b = append(appendName(b, name), '"')
	b = t.AppendFormat(b, time.RFC3339)
	return append(b, '"')
}
