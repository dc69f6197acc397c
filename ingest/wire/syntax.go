package wire

import (
	"bytes"
	"unicode/utf8"

	"tailbell/monitor"
)

// syntax checks JSON text (RFC 8259, and UTF-8 without lone surrogates).
type syntax struct {
	data  []byte
	pos   int
	depth int // the deepest nesting allowed
}

// checkSyntax reports why data is not exactly one JSON value; nil if it is.
func checkSyntax(data []byte, depth int) *fault {
	s := syntax{data: data, pos: skipSpace(data, 0), depth: depth}
	if f := s.value(0); f != nil {
		return f
	}
	s.pos = skipSpace(data, s.pos)
	if s.pos < len(data) {
		return s.fault("there is more text after the end of the value")
	}
	return nil
}

func (s *syntax) fault(what string) *fault {
	return refuse(monitor.NotJSON, "at byte %d: %s; send valid JSON (RFC 8259)", s.pos, what)
}

// peek returns the byte at pos, or 0 at the end, where 0 is never valid.
func (s *syntax) peek() byte {
	if s.pos < len(s.data) {
		return s.data[s.pos]
	}
	return 0
}

func (s *syntax) value(depth int) *fault {
	switch c := s.peek(); {
	case c == '{' || c == '[':
		if depth == s.depth {
			return refuse(monitor.TooDeep, "at byte %d: nested deeper than %d; an observation is one flat object", s.pos, s.depth)
		}
		if c == '{' {
			return s.object(depth + 1)
		}
		return s.array(depth + 1)
	case c == '"':
		return s.text()
	case c == '-' || c-'0' <= 9:
		return s.number()
	case c == 't':
		return s.literal("true")
	case c == 'f':
		return s.literal("false")
	case c == 'n':
		return s.literal("null")
	}
	if s.pos >= len(s.data) {
		return s.fault("the text ends where a value is due")
	}
	if s.pos == 0 && bytes.HasPrefix(s.data, []byte("\xEF\xBB\xBF")) {
		return s.fault("the text begins with a byte order mark")
	}
	return s.fault("no JSON value begins here")
}

func (s *syntax) object(depth int) *fault {
	s.pos = skipSpace(s.data, s.pos+1)
	if s.peek() == '}' {
		s.pos++
		return nil
	}
	for {
		if s.peek() != '"' {
			return s.fault("a field's name in quotes is due")
		}
		if f := s.text(); f != nil {
			return f
		}
		s.pos = skipSpace(s.data, s.pos)
		if s.peek() != ':' {
			return s.fault("a colon is due")
		}
		s.pos = skipSpace(s.data, s.pos+1)
		if f := s.value(depth); f != nil {
			return f
		}
		if done, f := s.next('}'); done || f != nil {
			return f
		}
	}
}

func (s *syntax) array(depth int) *fault {
	s.pos = skipSpace(s.data, s.pos+1)
	if s.peek() == ']' {
		s.pos++
		return nil
	}
	for {
		if f := s.value(depth); f != nil {
			return f
		}
		if done, f := s.next(']'); done || f != nil {
			return f
		}
	}
}

// next steps over the comma before another member, or over the closing
// bracket.
func (s *syntax) next(closing byte) (done bool, f *fault) {
	s.pos = skipSpace(s.data, s.pos)
	switch s.peek() {
	case closing:
		s.pos++
		return true, nil
	case ',':
		s.pos = skipSpace(s.data, s.pos+1)
		return false, nil
	}
	return false, s.fault("a comma or a closing bracket is due")
}

func (s *syntax) literal(word string) *fault {
	if !bytes.HasPrefix(s.data[s.pos:], []byte(word)) {
		return s.fault("no JSON value begins here")
	}
	s.pos += len(word)
	return nil
}

func (s *syntax) digits() bool {
	first := s.pos
	for s.peek()-'0' <= 9 {
		s.pos++
	}
	return s.pos > first
}

func (s *syntax) number() *fault {
	if s.peek() == '-' {
		s.pos++
	}
	if s.peek() == '0' {
		s.pos++
	} else if !s.digits() {
		return s.fault("a number's digit is due")
	}
	if s.peek() == '.' {
		s.pos++
		if !s.digits() {
			return s.fault("a digit is due after the point")
		}
	}
	if s.peek()|0x20 == 'e' {
		s.pos++
		if c := s.peek(); c == '+' || c == '-' {
			s.pos++
		}
		if !s.digits() {
			return s.fault("an exponent's digit is due")
		}
	}
	return nil
}

// text checks the string at pos.
func (s *syntax) text() *fault {
	s.pos++
	for s.pos < len(s.data) {
		switch c := s.data[s.pos]; {
		case c == '"':
			s.pos++
			return nil
		case c == '\\':
			if f := s.escape(); f != nil {
				return f
			}
		case c < ' ':
			return s.fault("a control character stands in a text; escape it")
		case c < utf8.RuneSelf:
			s.pos++
		default:
			r, size := utf8.DecodeRune(s.data[s.pos:])
			if r == utf8.RuneError && size == 1 {
				return refuse(monitor.NotUTF8, "at byte %d: the text is not UTF-8; encode it as UTF-8", s.pos)
			}
			s.pos += size
		}
	}
	return s.fault("the text ends inside a string")
}

// escape checks the escape sequence at pos.
func (s *syntax) escape() *fault {
	if s.pos+1 >= len(s.data) {
		return s.fault("the text ends inside a string")
	}
	if s.data[s.pos+1] != 'u' {
		if bytes.IndexByte([]byte(`"\/bfnrt`), s.data[s.pos+1]) < 0 {
			return s.fault("a backslash begins no escape of JSON")
		}
		s.pos += 2
		return nil
	}
	r := hexRune(s.data, s.pos)
	if r < 0 {
		return s.fault(`\u is not followed by four hexadecimal digits`)
	}
	if !isSurrogate(r) {
		s.pos += 6
		return nil
	}
	if joinSurrogates(r, hexRune(s.data, s.pos+6)) < 0 {
		return refuse(monitor.NotUTF8, `at byte %d: half of a surrogate pair, which is no character; escape both halves or none`, s.pos)
	}
	s.pos += 12
	return nil
}
