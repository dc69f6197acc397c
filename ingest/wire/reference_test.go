package wire

import (
	"bytes"
	"errors"
	"io"
	"math/big"
	"regexp"
	"slices"
	"strconv"
	"strings"
	"time"
	"unicode"
	"unicode/utf8"

	"tailbell/config"
	"tailbell/monitor"

	"github.com/go-json-experiment/json/jsontext"
)

// The reference decoder is slow and strict, and shares no code with the
// decoder: another JSON library, big numbers, time.Date and a regular
// expression. It gives the observation or the reason; syntaxFault stands for
// any fault of the text as such.

const syntaxFault = monitor.Reason("syntax")

// isSyntax reports whether the reason is of the text as such.
func isSyntax(r monitor.Reason) bool {
	return r == monitor.NotJSON || r == monitor.NotUTF8 || r == monitor.TooDeep
}

type refField struct {
	name  string
	kind  jsontext.Kind
	value string // text, or the literal
}

// refParse reads an element's fields with the library.
func refParse(data []byte, depth int) (list []refField, reason monitor.Reason) {
	dec := jsontext.NewDecoder(bytes.NewReader(data), jsontext.AllowDuplicateNames(true))
	var top jsontext.Kind
	for n := 0; ; n++ {
		tok, err := dec.ReadToken()
		if errors.Is(err, io.EOF) && n > 0 && dec.StackDepth() == 0 {
			break
		}
		if err != nil || dec.StackDepth() > depth {
			return nil, syntaxFault
		}
		if n == 0 {
			top = tok.Kind()
		} else if dec.StackDepth() == 0 && n > 0 && tok.Kind() != '}' && tok.Kind() != ']' {
			return nil, syntaxFault // a second value
		}
	}
	// One value only: nothing but space after it.
	check := jsontext.NewDecoder(bytes.NewReader(data), jsontext.AllowDuplicateNames(true))
	if _, err := check.ReadValue(); err != nil {
		return nil, syntaxFault
	}
	if len(bytes.Trim(data[check.InputOffset():], " \t\r\n")) > 0 {
		return nil, syntaxFault
	}
	if top != '{' {
		return nil, monitor.NotObject
	}
	dec = jsontext.NewDecoder(bytes.NewReader(data), jsontext.AllowDuplicateNames(true))
	must(dec.ReadToken())
	for dec.PeekKind() != '}' {
		name := must(dec.ReadToken()).String()
		f := refField{name: name, kind: dec.PeekKind()}
		if f.kind == '"' {
			f.value = must(dec.ReadToken()).String()
		} else {
			f.value = string(must(dec.ReadValue()))
		}
		list = append(list, f)
	}
	return list, ""
}

func must[T any](v T, err error) T {
	if err != nil {
		panic(err)
	}
	return v
}

func refDecode(data []byte, depth int) (o monitor.Observation, reason monitor.Reason) {
	list, reason := refParse(data, depth)
	if reason != "" {
		return o, reason
	}
	seen := map[string]bool{}
	var at monitor.Instant
	for _, f := range list {
		if seen[f.name] {
			return o, monitor.DuplicateField
		}
		ok := false
		switch f.name {
		case "id":
			o.ID, ok, reason = f.value, refID(f), monitor.BadID
		case "series":
			o.Series, ok, reason = f.value, f.kind == '"' && config.CheckSeries(f.value) == nil, monitor.BadSeries
		case "start":
			o.Start, ok = refTime(f)
			reason = monitor.BadTime
		case "end":
			o.End, ok = refTime(f)
			reason = monitor.BadTime
		case "at":
			at, ok = refTime(f)
			reason = monitor.BadTime
		case "reported":
			o.Reported, ok = refTime(f)
			reason = monitor.BadTime
		case "events":
			o.Events, ok = refWhole(f)
			reason = monitor.BadEvents
		case "revision":
			o.Revision, ok = refWhole(f)
			reason = monitor.BadRevision
		case "total":
			o.Events, ok = refWhole(f)
			reason = monitor.BadEvents
		case "since":
			o.Since, ok = refTime(f)
			reason = monitor.BadTime
		case "exposure", "exposure_total":
			o.Exposure, ok = refDecimal(f)
			reason = monitor.BadExposure
		case "retracted":
			o.Retracted, ok, reason = f.kind == 't', f.kind == 't' || f.kind == 'f', monitor.BadRevision
		default:
			reason = monitor.UnknownField
		}
		if !ok {
			return o, reason
		}
		seen[f.name] = true
	}
	o.HasEvents, o.HasExposure, o.HasReported = seen["events"] || seen["total"], seen["exposure"] || seen["exposure_total"], seen["reported"]
	o.HasSince = seen["since"]
	o.Reading = seen["total"] || seen["exposure_total"]
	if seen["at"] {
		o.Instant = true
	}
	reason = refTogether(&o, seen, at)
	if o.Instant {
		o.Start, o.End = at, at
	}
	return o, reason
}

func refTogether(o *monitor.Observation, seen map[string]bool, at monitor.Instant) monitor.Reason {
	if seen["series"] && !o.Retracted && (o.Reading || seen["since"]) {
		for name := range seen {
			if !slices.Contains([]string{"series", "at", "total", "exposure_total", "since", "reported", "retracted"}, name) {
				return monitor.BadReading
			}
		}
		if !o.Reading || !seen["at"] || seen["since"] && at < o.Since {
			return monitor.BadReading
		}
		return ""
	}
	switch span := seen["start"] && seen["end"]; {
	case !seen["series"]:
		return monitor.BadSeries
	case o.Retracted && !seen["id"]:
		return monitor.BadID
	case o.Retracted && o.Revision == 0, seen["revision"] && !seen["id"]:
		return monitor.BadRevision
	case o.Retracted && (seen["start"] || seen["end"] || seen["at"]):
		return monitor.BadInterval
	case o.Retracted && seen["events"]:
		return monitor.BadEvents
	case o.Retracted && seen["exposure"]:
		return monitor.BadExposure
	case o.Retracted && (o.Reading || seen["since"]):
		return monitor.BadReading
	case o.Retracted:
		return ""
	case seen["at"] && (seen["start"] || seen["end"]), !seen["at"] && !span, span && o.End <= o.Start:
		return monitor.BadInterval
	case !seen["events"] && !seen["exposure"]:
		return monitor.NothingReported
	}
	return ""
}

func refID(f refField) bool {
	n := utf8.RuneCountInString(f.value)
	return f.kind == '"' && n >= 1 && n <= 200 && !strings.ContainsFunc(f.value, unicode.IsControl)
}

func refRat(f refField) (*big.Rat, bool) {
	if f.kind != '0' {
		return nil, false
	}
	if _, exp, found := strings.Cut(strings.ToLower(f.value), "e"); found {
		if n, err := strconv.Atoi(exp); err != nil || n > 400 || n < -400 {
			return nil, false
		}
	}
	return new(big.Rat).SetString(f.value)
}

func refWhole(f refField) (int64, bool) {
	r, ok := refRat(f)
	if !ok || !r.IsInt() || r.Sign() < 0 || r.Num().Cmp(big.NewInt(1<<53)) > 0 {
		return 0, false
	}
	return r.Num().Int64(), true
}

// refDecimal finds the fewest digits after the point with which the number is
// whole.
func refDecimal(f refField) (config.Decimal, bool) {
	r, ok := refRat(f)
	if !ok || r.Sign() < 0 {
		return config.Decimal{}, false
	}
	for digits := uint8(0); digits <= 18; digits++ {
		if r.IsInt() {
			return config.Decimal{Coef: r.Num().Uint64(), Digits: digits}, r.Num().IsUint64()
		}
		r.Mul(r, big.NewRat(10, 1))
	}
	return config.Decimal{}, false
}

var refTimePattern = regexp.MustCompile(`^(\d{4})-(\d\d)-(\d\d)[Tt](\d\d):(\d\d):(\d\d)(?:\.(\d+))?(?:[Zz]|([+-])(\d\d):(\d\d))$`)

// refTime reads RFC 3339 by the grammar of its section 5.6.
func refTime(f refField) (monitor.Instant, bool) {
	m := refTimePattern.FindStringSubmatch(f.value)
	if f.kind != '"' || m == nil {
		return 0, false
	}
	n := make([]int, len(m))
	for i, s := range m {
		if i != 7 && s != "" {
			n[i], _ = strconv.Atoi(s) //nolint:errcheck // digits by the pattern, or a sign that is read below
		}
	}
	year, month, day, hour, minute, second := n[1], n[2], n[3], n[4], n[5], n[6]
	if year < 1 || year > 9998 || hour > 23 || minute > 59 || second > 60 || n[9] > 23 || n[10] > 59 {
		return 0, false
	}
	if d := time.Date(year, time.Month(month), day, 0, 0, 0, 0, time.UTC); month < 1 || d.Day() != day || int(d.Month()) != month {
		return 0, false
	}
	offset := time.Duration(n[9])*time.Hour + time.Duration(n[10])*time.Minute
	if m[8] == "-" {
		offset = -offset
	}
	micros, _ := strconv.Atoi((m[7] + "000000")[:6]) //nolint:errcheck // digits by the pattern
	whole := time.Date(year, time.Month(month), day, hour, minute, min(second, 59), 0, time.UTC).Add(-offset)
	if second == 60 {
		if s := whole.Format("01-02T15:04:05"); s != "06-30T23:59:59" && s != "12-31T23:59:59" {
			return 0, false
		}
		whole = whole.Add(time.Second)
	}
	return monitor.InstantOf(whole) + monitor.Instant(micros), true
}

// wellFormedArray returns the elements of a valid JSON array, else nil.
func wellFormedArray(data []byte) (list []jsontext.Value) {
	value := jsontext.Value(bytes.Trim(data, " \t\r\n"))
	if !value.IsValid(jsontext.AllowDuplicateNames(true)) || value.Kind() != '[' {
		return nil
	}
	dec := jsontext.NewDecoder(bytes.NewReader(value), jsontext.AllowDuplicateNames(true))
	must(dec.ReadToken())
	for dec.PeekKind() != ']' {
		list = append(list, must(dec.ReadValue()).Clone())
	}
	return list
}
