package config

import "strings"

// Pattern matches series by name part: "*" stands for any run of characters
// within one part, a part "**" for any number of parts, none included.
type Pattern struct{ text string }

// NewPattern returns the pattern for a text such as "*/*/line-infection".
func NewPattern(text string) Pattern { return Pattern{text} }

// String returns the pattern as written.
func (p Pattern) String() string { return p.text }

// Match reports whether the whole series name matches.
func (p Pattern) Match(series string) bool {
	if p.text == "**" {
		return true
	}
	return matchParts(p.text, series)
}

func matchParts(pattern, name string) bool {
	head, rest, more := strings.Cut(pattern, "/")
	if head == "**" {
		if !more {
			return true
		}
		for {
			if matchParts(rest, name) {
				return true
			}
			_, tail, ok := strings.Cut(name, "/")
			if !ok {
				return false
			}
			name = tail
		}
	}
	part, tail, moreName := strings.Cut(name, "/")
	if !matchPart(head, part) {
		return false
	}
	if !more && !moreName {
		return true
	}
	if more && !moreName {
		return rest == "**"
	}
	return more && moreName && matchParts(rest, tail)
}

// matchPart lets each "*" take as little as it can and only ever goes back to
// the last one, so its time is bounded by the product of the two lengths.
func matchPart(pattern, part string) bool {
	star, taken := -1, 0
	p, i := 0, 0
	for i < len(part) {
		switch {
		case p < len(pattern) && pattern[p] == '*':
			star, taken = p, i
			p++
		case p < len(pattern) && pattern[p] == part[i]:
			p++
			i++
		case star >= 0:
			taken++
			p, i = star+1, taken
		default:
			return false
		}
	}
	return strings.Trim(pattern[p:], "*") == ""
}
