package config

import (
	"fmt"
	"slices"
	"strings"
)

// maxSums bounds the sums of an indicator.
const maxSums = 32

// Sum says which series of an indicator are summed, by the parts of their names.
// A part in braces is kept: there is one sum for each text that stands there.
// Over a part with a * is summed.
type Sum struct {
	text    string
	pattern Pattern
}

// NewSum returns the sum for a text such as "{site}/*/line-infection".
func NewSum(text string) Sum {
	parts := strings.Split(text, "/")
	for i, p := range parts {
		if kept(p) {
			parts[i] = "*"
		}
	}
	return Sum{text, NewPattern(strings.Join(parts, "/"))}
}

// String returns the sum as written.
func (m Sum) String() string { return m.text }

// kept reports whether the part stands in braces.
func kept(part string) bool { return strings.HasPrefix(part, "{") && strings.HasSuffix(part, "}") }

// NameFor returns the name of the sum that the series belongs to, such as
// "quillmere-east/*/line-infection", and false if it belongs to none. The name
// has a * in it: no series can be called so.
func (m Sum) NameFor(series string) (string, bool) {
	if !m.pattern.Match(series) {
		return "", false
	}
	parts, from := strings.Split(m.text, "/"), strings.Split(series, "/")
	for i, p := range parts {
		if kept(p) { // no ** stands before it
			parts[i] = from[i]
		}
	}
	return strings.Join(parts, "/"), true
}

// IsSum reports whether the name is that of a sum.
func IsSum(name string) bool { return strings.Contains(name, "*") }

// readSums reads which sums of its series an indicator monitors.
func (s section) readSums() []Sum {
	items, _ := s.list("sums", maxSums)
	var sums []Sum
	for i, n := range items {
		key := s.item("sums", i)
		if n.kind != textKind {
			s.wrongKind(n, key, textKind)
			continue
		}
		problem := checkSum(n.text)
		switch {
		case problem != "":
			s.add(n, key, fmt.Sprintf("%q is no sum of series: %s", n.text, problem),
				`write e.g. "{site}/*/line-infection" for one sum of all wards for each site, "*/*/line-infection" for one of all`)
		case slices.ContainsFunc(sums, func(m Sum) bool { return m.text == n.text }):
			s.add(n, key, fmt.Sprintf("%q stands twice", n.text), "keep one")
		default:
			sums = append(sums, NewSum(n.text))
		}
	}
	return sums
}

// checkSum says why the text is no sum, "" if it is one.
func checkSum(text string) string {
	parts := strings.Split(text, "/")
	summed := false
	for i, p := range parts {
		switch {
		case !kept(p):
			summed = summed || strings.Contains(p, "*")
		case strings.Trim(p, "{}") == "" || strings.ContainsAny(p[1:len(p)-1], "{}*"):
			return fmt.Sprintf("part %d has no plain word between its braces", i+1)
		case slices.Contains(parts[:i], "**"):
			return fmt.Sprintf("part %d in braces stands behind **, where no part can be told by its place", i+1)
		default:
			parts[i] = "x"
		}
	}
	if problem := checkPattern(strings.Join(parts, "/")); problem != "" {
		return problem
	}
	if !summed {
		return "no part has a *, so each would be a sum of one series"
	}
	return ""
}

// checkSums refuses sums that can't be kept together with the rest.
func (s section) checkSums(in *Indicator, setup *Setup) {
	if len(in.Sums) > 0 && !in.SlotLooks {
		s.fault("sums", "are looked at when slots have ended, and this indicator looks at events only", `add "slot" to looks, or leave sums out`)
	}
	for _, m := range in.Sums {
		switch {
		case !slices.ContainsFunc(in.Series, func(p Pattern) bool { _, both := overlap(p, m.pattern); return both }):
			s.fault("sums", fmt.Sprintf("%q matches no series of this indicator", m.text), "compare it with the indicator's own patterns")
		}
	}
}

// MayMatch reports whether a series of the indicator may match the pattern, or
// one of its sums.
func (in *Indicator) MayMatch(p Pattern) bool {
	return slices.ContainsFunc(in.Series, func(q Pattern) bool { _, both := overlap(p, q); return both })
}

// Gathered returns the sums of the indicator whose members may lie in several
// partitions, whatever the number of partitions is: changes reach them at the
// boundaries of slots, when every partition has told its own.
func (in *Indicator) Gathered(keyParts int) []Sum {
	var sums []Sum
	for _, m := range in.Sums {
		if m.Gathered(keyParts) {
			sums = append(sums, m)
		}
	}
	return sums
}

// Makes reports whether the sum has this name for any series.
func (m Sum) Makes(name string) bool {
	parts, from := strings.Split(m.text, "/"), strings.Split(name, "/")
	if len(parts) != len(from) {
		return false
	}
	for i, p := range parts {
		if kept(p) && strings.Contains(from[i], "*") || !kept(p) && p != from[i] {
			return false
		}
	}
	return true
}

// TellsAcross reports whether partitions wait for what others tell them: sums are
// gathered from several, or what they count is.
func (s *Setup) TellsAcross() bool {
	return s.Partitions > 1 && slices.ContainsFunc(s.Indicators, func(in Indicator) bool {
		return len(in.Gathered(s.KeyParts)) > 0 || in.CountsAcross(s.KeyParts)
	})
}

// HomeOf returns the partition that gathers the sums of an indicator, by its
// name.
func (s *Setup) HomeOf(indicator string) int { return PartitionOf(indicator, 0, s.Partitions) }

// PartitionOf returns the partition that holds a series, or a sum.
func (s *Setup) PartitionOf(series string) int {
	if s.Partitions > 1 && IsSum(series) {
		for i := range s.Indicators {
			in := &s.Indicators[i]
			if slices.ContainsFunc(in.Gathered(s.KeyParts), func(m Sum) bool { return m.Makes(series) }) {
				return s.HomeOf(in.Name)
			}
		}
	}
	return PartitionOf(series, s.KeyParts, s.Partitions)
}

// Gathered reports whether the members of one sum may lie in several
// partitions.
func (m Sum) Gathered(keyParts int) bool {
	parts := strings.Split(m.text, "/")
	return slices.ContainsFunc(parts[:min(keyParts, len(parts))], func(p string) bool { return strings.Contains(p, "*") })
}

// readServedSums reads which sums a baseline serves, if it is one for sums.
func (s section) readServedSums(in *Indicator, last bool) (Pattern, bool) {
	n, given, ok := s.get("sums", textKind)
	if !given {
		return Pattern{}, false
	}
	switch {
	case !ok:
	case s.has("series"):
		s.fault("sums", "and series exclude each other", "write one baseline for sums and one for series")
	case last:
		s.fault("sums", "the last baseline must serve every series that is left", "add a baseline without sums after it")
	case !slices.ContainsFunc(in.Sums, func(m Sum) bool { _, both := overlap(NewPattern(n.text), m.pattern); return both }):
		s.fault("sums", fmt.Sprintf("%q matches no sum of this indicator", n.text), "compare it with the indicator's sums: their names have the * that was summed over")
	}
	if problem := checkPattern(n.text); ok && problem != "" {
		s.fault("sums", fmt.Sprintf("%q is no pattern: %s", n.text, problem), "")
	}
	return NewPattern(n.text), true
}

// Serves reports whether the baseline is meant for the series, or the sum.
func (b *Baseline) Serves(series string) bool {
	if b.Sums.text != "" {
		return IsSum(series) && b.Sums.Match(series)
	}
	return b.Series.Match(series)
}

func sumsText(in *Indicator) string {
	var texts []string
	for _, m := range in.Sums {
		texts = append(texts, m.text)
	}
	return strings.Join(texts, ", ")
}
