package config

import (
	"slices"
	"strings"
)

// overlap reports whether some series name matches both patterns, and gives
// an example.
func overlap(a, b Pattern) (example string, both bool) {
	o := overlapper[string]{
		any:  func(p string) bool { return p == "**" },
		both: overlapPart,
		one: func(p string) string {
			if p = strings.ReplaceAll(p, "*", ""); p == "" {
				p = "x"
			}
			return p
		},
	}
	parts, both := o.overlap(strings.Split(a.text, "/"), strings.Split(b.text, "/"))
	if both && len(parts) == 0 {
		parts = []string{"x"} // "**" and "**"
	}
	return strings.Join(parts, "/"), both && len(parts) <= MaxSeriesParts
}

// overlapPart does the same for two parts.
func overlapPart(a, b string) (example string, both bool) {
	o := overlapper[rune]{
		any:  func(c rune) bool { return c == '*' },
		both: func(a, b rune) (rune, bool) { return a, a == b },
		one:  func(c rune) rune { return c },
	}
	text, both := o.overlap([]rune(a), []rune(b))
	if both && len(text) == 0 {
		text = []rune{'x'} // "*" and "*"
	}
	return string(text), both && len(text) <= MaxPartLength
}

// overlapper finds a shortest-first sequence that matches two patterns, in
// which some elements stand for any number of others.
type overlapper[E any] struct {
	// any reports whether an element stands for any number of others; both
	// gives what matches two elements that don't, one what matches a single.
	any  func(E) bool
	both func(a, b E) (E, bool)
	one  func(E) E
	// failed are the pairs of rests, by length, known to have nothing in
	// common: without it the time would grow exponentially.
	failed map[[2]int]bool
}

func (o *overlapper[E]) overlap(a, b []E) ([]E, bool) {
	pair := [2]int{len(a), len(b)}
	if o.failed[pair] {
		return nil, false
	}
	found, both := o.step(a, b)
	if !both {
		if o.failed == nil {
			o.failed = make(map[[2]int]bool)
		}
		o.failed[pair] = true
	}
	return found, both
}

func (o *overlapper[E]) step(a, b []E) ([]E, bool) {
	switch {
	case len(a) == 0 && len(b) == 0:
		return nil, true
	case len(a) > 0 && o.any(a[0]):
		if rest, both := o.overlap(a[1:], b); both {
			return rest, true
		}
		if len(b) == 0 {
			return nil, false
		}
		rest, both := o.overlap(a, b[1:])
		return o.before(b[0], rest, both)
	case len(b) > 0 && o.any(b[0]):
		if rest, both := o.overlap(a, b[1:]); both {
			return rest, true
		}
		if len(a) == 0 {
			return nil, false
		}
		rest, both := o.overlap(a[1:], b)
		return o.before(a[0], rest, both)
	case len(a) == 0 || len(b) == 0:
		return nil, false
	}
	head, both := o.both(a[0], b[0])
	if !both {
		return nil, false
	}
	rest, both := o.overlap(a[1:], b[1:])
	return slices.Insert(rest, 0, head), both
}

// before puts what matches e in front of rest.
func (o *overlapper[E]) before(e E, rest []E, both bool) ([]E, bool) {
	if !both || o.any(e) {
		return rest, both
	}
	return slices.Insert(rest, 0, o.one(e)), true
}
