package words

import (
	"strings"
	"unicode"
	"unicode/utf8"
)

// narrowest is the smallest width that is honoured.
const narrowest = 40

// wrap breaks text at spaces so that no line is wider than width characters
// where its words allow, the first line after indent, the others after hang.
func wrap(text string, width int, indent, hang string) string {
	width = max(width, narrowest)
	var b strings.Builder
	used := 0
	for _, word := range unbroken(text) {
		n := utf8.RuneCountInString(word)
		switch {
		case used == 0:
			b.WriteString(indent)
			used = len(indent)
		case used+1+n > width:
			b.WriteString("\n" + hang)
			used = len(hang)
		default:
			b.WriteByte(' ')
			used++
		}
		b.WriteString(word)
		used += n
	}
	if used > 0 {
		b.WriteByte('\n')
	}
	return b.String()
}

// unbroken splits text into words, a per cent sign kept with its number, and
// what is equal with what it equals.
func unbroken(text string) []string {
	var words []string
	for _, w := range strings.Fields(text) {
		if n := len(words); n > 0 && (strings.HasPrefix(w, "%") || w == "=" || strings.HasSuffix(words[n-1], " =")) {
			words[n-1] += " " + w
			continue
		}
		words = append(words, w)
	}
	return words
}

// clean makes text from outside harmless for a terminal: control characters
// and those that turn the direction of writing become a replacement mark,
// white space a blank.
func clean(text string) string {
	return strings.Map(func(c rune) rune {
		switch {
		case unicode.IsSpace(c):
			return ' '
		case unicode.IsControl(c), unicode.Is(unicode.Cf, c):
			return utf8.RuneError
		}
		return c
	}, text)
}

// stop ends text with a full stop unless it ends a sentence already.
func stop(text string) string {
	if strings.HasSuffix(text, ".") || strings.HasSuffix(text, ".\u201d") {
		return text
	}
	return text + "."
}
