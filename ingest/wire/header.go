package wire

import (
	"strings"

	"tailbell/monitor"
)

// The headers of messages. Names are compared without regard to case.
const (
	// TimeHeader holds the history time of a message (RFC 3339).
	TimeHeader = "Tailbell-Time"
	// LiveHeader, with the value 1 on a tick, ends history time.
	LiveHeader = "Tailbell-Live"
	// ContentTypeHeader names the form of the data.
	ContentTypeHeader = "Content-Type"
)

// lookup returns the value of a header that may be given once.
func lookup(header map[string][]string, name string) (value string, found bool, f *fault) {
	for key, values := range header {
		if !strings.EqualFold(key, name) || len(values) == 0 {
			continue
		}
		if found || len(values) > 1 {
			return "", true, refuse(monitor.BadHeader, "the header %s is given more than once; give it once", name)
		}
		value, found = strings.TrimSpace(values[0]), true
	}
	return value, found, nil
}

// readHeader reads the project's own headers into m.
func readHeader(header map[string][]string, m *monitor.Message) (live bool, f *fault) {
	if len(header) == 0 {
		return false, nil
	}
	text, found, f := lookup(header, TimeHeader)
	if f != nil {
		return false, f
	}
	if found {
		at, ok := parseTime([]byte(text))
		if !ok {
			return false, refuse(monitor.BadHeader, "the header %s: %s", TimeHeader, whyNoTime(text))
		}
		m.Time, m.HasTime = at, true
	}
	text, live, f = lookup(header, LiveHeader)
	if f != nil {
		return false, f
	}
	if live && text != "1" {
		return false, refuse(monitor.BadHeader, "the header %s is %q; its only value is 1", LiveHeader, clip(text))
	}
	return live, nil
}
