package wire

import (
	"bytes"

	"tailbell/config"
	"tailbell/monitor"
)

// quick reads the observation at i if it is valid and plainly written: no
// escapes, series and id in ASCII, numbers without exponent. It returns the
// position after it; or -1 for anything else, which careful must judge, and
// then o is left half filled.
func quick(data []byte, i int, o *monitor.Observation) int {
	w := draft{o: o}
	if i >= len(data) || data[i] != '{' {
		return -1
	}
	i++
	for {
		m, at := quickName(data, i)
		if at < 0 || w.seen&m != 0 {
			return -1
		}
		w.seen |= m
		i = w.quickValue(m, data, at)
		if i < 0 {
			return -1
		}
		i = skipSpace(data, i)
		if i >= len(data) {
			return -1
		}
		if data[i] == '}' {
			break
		}
		if data[i] != ',' {
			return -1
		}
		i++
	}
	if w.finish() != nil {
		return -1
	}
	return i + 1
}

// quickName reads a field's name and its colon, and returns where the value
// begins; -1 if the contract has no such field.
func quickName(data []byte, i int) (m member, value int) {
	i = skipSpace(data, i)
	if i >= len(data) || data[i] != '"' {
		return 0, -1
	}
	i++
	first := i
	for i < len(data) && data[i] != '"' {
		i++
	}
	m = memberOf(data[first:i])
	i = skipSpace(data, i+1)
	if m == 0 || i >= len(data) || data[i] != ':' {
		return 0, -1
	}
	return m, skipSpace(data, i+1)
}

// quickValue reads the value at i and returns the position after it, or -1.
func (w *draft) quickValue(m member, data []byte, i int) int {
	if i >= len(data) {
		return -1
	}
	if data[i] == '"' {
		i++
		n := bytes.IndexByte(data[i:], '"')
		if n < 0 || !w.quickText(m, data[i:i+n]) {
			return -1
		}
		return i + n + 1
	}
	end := i
	for end < len(data) && !endsToken[data[end]] {
		end++
	}
	if !w.quickToken(m, data[i:end]) {
		return -1
	}
	return end
}

// endsToken holds the bytes that end a number or a literal.
var endsToken = [256]bool{',': true, '}': true, ' ': true, '\n': true, '\r': true, '\t': true}

func (w *draft) quickText(m member, text []byte) bool {
	ok := true
	switch m {
	case hasSeries:
		w.series = text
		return plainSeries(text)
	case hasID:
		w.id = text
		return plainID(text)
	case hasStart:
		w.o.Start, ok = parseTime(text)
	case hasEnd:
		w.o.End, ok = parseTime(text)
	case hasAt:
		w.at, ok = parseTime(text)
	case hasReported:
		w.o.Reported, ok = parseTime(text)
	case hasSince:
		w.o.Since, ok = parseTime(text)
	case hasEvents, hasExposure, hasRevision, hasRetracted, hasTotal, hasExposureTotal:
		return false
	}
	return ok
}

func (w *draft) quickToken(m member, text []byte) bool {
	ok := true
	switch m {
	case hasEvents, hasTotal:
		w.o.Events, ok = quickWhole(text)
	case hasRevision:
		w.o.Revision, ok = quickWhole(text)
	case hasExposure, hasExposureTotal:
		w.o.Exposure, ok = quickDecimal(text)
	case hasRetracted:
		w.o.Retracted = string(text) == "true"
		return w.o.Retracted || string(text) == "false"
	case hasSeries, hasID, hasStart, hasEnd, hasAt, hasReported, hasSince:
		return false
	}
	return ok
}

// plainSeries reports whether the text is a series' name in ASCII.
func plainSeries(text []byte) bool {
	if len(text) == 0 || len(text) > config.MaxSeriesBytes {
		return false
	}
	parts, length := 1, 0
	for _, c := range text {
		if c == '/' {
			if length == 0 || parts == config.MaxSeriesParts {
				return false
			}
			parts, length = parts+1, 0
			continue
		}
		length++
		if !inPart[c] || length > config.MaxPartLength {
			return false
		}
	}
	return length > 0
}

// inPart holds the ASCII characters of a series' name part.
var inPart = func() (set [256]bool) {
	for _, c := range "abcdefghijklmnopqrstuvwxyzABCDEFGHIJKLMNOPQRSTUVWXYZ0123456789-_." {
		set[c] = true
	}
	return set
}()

// plainID reports whether the text is an id of printable ASCII without
// escapes.
func plainID(text []byte) bool {
	if len(text) == 0 || len(text) > MaxIDLength {
		return false
	}
	for _, c := range text {
		if c < ' ' || c >= 0x7f || c == '\\' {
			return false
		}
	}
	return true
}
