package wire

import (
	"strconv"
	"unicode/utf8"

	"tailbell/monitor"
)

// EncodeObservation appends the observation as canonical JSON: fields in the
// contract's order, absent ones left out, times in UTC, numbers in their
// shortest plain form. Decoding it gives the observation back, if it was a
// valid one.
func EncodeObservation(dst []byte, o *monitor.Observation) []byte {
	dst = append(dst, '{')
	if o.ID != "" {
		dst = append(dst, `"id":`...)
		dst = append(AppendText(dst, o.ID), ',')
	}
	dst = append(dst, `"series":`...)
	dst = AppendText(dst, o.Series)
	switch {
	case o.Retracted:
	case o.Instant:
		dst = appendTimeField(dst, `,"at":"`, o.Start)
	default:
		dst = appendTimeField(dst, `,"start":"`, o.Start)
		dst = appendTimeField(dst, `,"end":"`, o.End)
	}
	if o.HasEvents {
		name := `,"events":`
		if o.Reading {
			name = `,"total":`
		}
		dst = append(dst, name...)
		dst = strconv.AppendInt(dst, o.Events, 10)
	}
	if o.HasExposure {
		if dst = append(dst, `,"exposure`...); o.Reading {
			dst = append(dst, "_total"...)
		}
		dst = append(dst, `":`...)
		dst = append(dst, o.Exposure.String()...)
	}
	if o.HasSince {
		dst = appendTimeField(dst, `,"since":"`, o.Since)
	}
	if o.Revision != 0 {
		dst = append(dst, `,"revision":`...)
		dst = strconv.AppendInt(dst, o.Revision, 10)
	}
	if o.HasReported {
		dst = appendTimeField(dst, `,"reported":"`, o.Reported)
	}
	if o.Retracted {
		dst = append(dst, `,"retracted":true`...)
	}
	return append(dst, '}')
}

// EncodeAct appends the act as canonical JSON. Decoding it gives the act back,
// if it was a valid one.
func EncodeAct(dst []byte, a *monitor.Act) []byte {
	dst = append(dst, `{"act":`...)
	dst = AppendText(dst, a.Kind.String())
	if a.Alert != "" {
		dst = append(dst, `,"alert":`...)
		dst = AppendText(dst, a.Alert)
	} else {
		dst = append(dst, `,"series":`...)
		dst = AppendText(dst, a.Series)
		if !a.Kind.OnSeries() {
			dst = append(dst, `,"direction":`...)
			dst = AppendText(dst, string(a.Direction))
		}
	}
	if a.Kind.OnSeries() {
		dst = appendSeriesAct(dst, a)
	}
	if a.Kind == monitor.Mark {
		mark := string(a.Mark)
		if mark == "" {
			mark = unmarked
		}
		dst = append(dst, `,"mark":`...)
		dst = AppendText(dst, mark)
	}
	if a.Kind == monitor.Shelve {
		dst = appendTimeField(dst, `,"until":"`, a.Until)
	}
	dst = append(dst, `,"by":`...)
	dst = AppendText(dst, a.By)
	if a.Why != "" {
		dst = append(dst, `,"why":`...)
		dst = AppendText(dst, a.Why)
	}
	if a.HasAt {
		dst = appendTimeField(dst, `,"at":"`, a.At)
	}
	return append(dst, '}')
}

// FormatTime returns the moment as the header Tailbell-Time has it.
func FormatTime(at monitor.Instant) string {
	return string(AppendTime(nil, at))
}

func appendTimeField(dst []byte, name string, at monitor.Instant) []byte {
	return append(AppendTime(append(dst, name...), at), '"')
}

// AppendText appends a JSON string. What is not UTF-8 becomes U+FFFD.
func AppendText(dst []byte, text string) []byte {
	const hex = "0123456789abcdef"
	dst = append(dst, '"')
	for i := 0; i < len(text); {
		c := text[i]
		switch {
		case c == '"' || c == '\\':
			dst = append(dst, '\\', c)
		case c < ' ':
			dst = append(dst, '\\', 'u', '0', '0', hex[c>>4], hex[c&15])
		case c < utf8.RuneSelf:
			dst = append(dst, c)
		default:
			r, size := utf8.DecodeRuneInString(text[i:])
			dst = utf8.AppendRune(dst, r)
			i += size
			continue
		}
		i++
	}
	return append(dst, '"')
}
