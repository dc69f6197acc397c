package wire

import (
	"unicode/utf16"
	"unicode/utf8"
)

// skipSpace returns the first position from i on that holds no JSON white
// space.
func skipSpace(data []byte, i int) int {
	for i < len(data) && isSpace(data[i]) {
		i++
	}
	return i
}

func isSpace(c byte) bool {
	return c == ' ' || c == '\n' || c == '\r' || c == '\t'
}

// hexRune returns the code unit of the \uXXXX at i, or -1.
func hexRune(data []byte, i int) rune {
	if i+6 > len(data) || data[i] != '\\' || data[i+1] != 'u' {
		return -1
	}
	var r rune
	for _, c := range data[i+2 : i+6] {
		switch {
		case c-'0' <= 9:
			r = r<<4 | rune(c-'0')
		case (c|0x20)-'a' <= 5:
			r = r<<4 | rune((c|0x20)-'a'+10)
		default:
			return -1
		}
	}
	return r
}

func isSurrogate(r rune) bool { return utf16.IsSurrogate(r) }

// joinSurrogates returns the character of a surrogate pair, or -1.
func joinSurrogates(high, low rune) rune {
	if low < 0 {
		return -1
	}
	r := utf16.DecodeRune(high, low)
	if r == utf8.RuneError {
		return -1
	}
	return r
}

// unquote returns the text of a valid JSON string with its quotes.
func unquote(quoted []byte) []byte {
	inner := quoted[1 : len(quoted)-1]
	plain := true
	for _, c := range inner {
		if c == '\\' {
			plain = false
			break
		}
	}
	if plain {
		return inner
	}
	out := make([]byte, 0, len(inner))
	for i := 0; i < len(inner); {
		c := inner[i]
		if c != '\\' {
			out = append(out, c)
			i++
			continue
		}
		if inner[i+1] != 'u' {
			out = append(out, unescape(inner[i+1]))
			i += 2
			continue
		}
		r := hexRune(inner, i)
		i += 6
		if isSurrogate(r) {
			r = joinSurrogates(r, hexRune(inner, i))
			i += 6
		}
		out = utf8.AppendRune(out, r)
	}
	return out
}

func unescape(c byte) byte {
	switch c {
	case 'b':
		return '\b'
	case 'f':
		return '\f'
	case 'n':
		return '\n'
	case 'r':
		return '\r'
	case 't':
		return '\t'
	}
	return c
}

// stringEnd returns the position after the string at i, or -1 if it does not
// end. It looks at nothing but quotes and backslashes.
func stringEnd(data []byte, i int) int {
	for i++; i < len(data); i++ {
		switch data[i] {
		case '"':
			return i + 1
		case '\\':
			i++
		}
	}
	return -1
}

// valueEnd returns the position after the value at i of text whose syntax was
// checked.
func valueEnd(data []byte, i int) int {
	depth := 0
	for i < len(data) {
		switch data[i] {
		case '"':
			i = stringEnd(data, i)
			if depth == 0 {
				return i
			}
			continue
		case '{', '[':
			depth++
		case '}', ']':
			if depth == 0 {
				return i
			}
			depth--
			if depth == 0 {
				return i + 1
			}
		case ',', ' ', '\n', '\r', '\t':
			if depth == 0 {
				return i
			}
		}
		i++
	}
	return i
}

// field is one member of an object, its value as written.
type field struct {
	name  string
	value []byte
}

// fields returns the members of an object whose syntax was checked, in the
// order of the text.
func fields(data []byte) []field {
	var list []field
	i := skipSpace(data, skipSpace(data, 0)+1)
	for data[i] != '}' {
		end := stringEnd(data, i)
		name := string(unquote(data[i:end]))
		i = skipSpace(data, skipSpace(data, end)+1)
		end = valueEnd(data, i)
		list = append(list, field{name: name, value: data[i:end]})
		i = skipSpace(data, end)
		if data[i] == ',' {
			i = skipSpace(data, i+1)
		}
	}
	return list
}
