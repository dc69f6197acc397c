package config

import "strings"

// overlap reports whether some series name matches both patterns, and gives
// an example.
func overlap(a, b Pattern) (example string, both bool) {
	parts, both := overlapParts(strings.Split(a.text, "/"), strings.Split(b.text, "/"))
	if both && len(parts) == 0 {
		parts = []string{"x"} // "**" and "**"
	}
	return strings.Join(parts, "/"), both && len(parts) <= MaxSeriesParts
}

func overlapParts(a, b []string) ([]string, bool) {
	switch {
	case len(a) == 0 && len(b) == 0:
		return nil, true
	case len(a) > 0 && a[0] == "**":
		return overlapAny(a, b)
	case len(b) > 0 && b[0] == "**":
		return overlapAny(b, a)
	case len(a) == 0 || len(b) == 0:
		return nil, false
	}
	head, both := overlapPart(a[0], b[0])
	if !both {
		return nil, false
	}
	tail, both := overlapParts(a[1:], b[1:])
	if !both {
		return nil, false
	}
	return append([]string{head}, tail...), true
}

// overlapAny is overlapParts where any begins with "**".
func overlapAny(any, other []string) ([]string, bool) {
	if rest, both := overlapParts(any[1:], other); both {
		return rest, true
	}
	if len(other) == 0 {
		return nil, false
	}
	rest, both := overlapParts(any, other[1:])
	if !both || other[0] == "**" {
		return rest, both
	}
	head := strings.ReplaceAll(other[0], "*", "")
	if head == "" {
		head = "x"
	}
	return append([]string{head}, rest...), true
}

func overlapPart(a, b string) (string, bool) {
	text, both := overlapText(a, b)
	if both && text == "" {
		text = "x" // both are "*" alone
	}
	return text, both
}

func overlapText(a, b string) (string, bool) {
	switch {
	case a == "" && b == "":
		return "", true
	case strings.HasPrefix(a, "*"):
		return overlapStar(a, b)
	case strings.HasPrefix(b, "*"):
		return overlapStar(b, a)
	case a == "" || b == "" || a[0] != b[0]:
		return "", false
	}
	rest, both := overlapText(a[1:], b[1:])
	return a[:1] + rest, both
}

// overlapStar is overlapText where star begins with "*".
func overlapStar(star, other string) (string, bool) {
	if rest, both := overlapText(star[1:], other); both {
		return rest, true
	}
	if other == "" {
		return "", false
	}
	rest, both := overlapText(star, other[1:])
	if other[0] == '*' {
		return rest, both
	}
	return other[:1] + rest, both
}
