package config

import (
	"errors"
	"fmt"
	"strings"
	"unicode"
	"unicode/utf8"
)

// Bounds of a series' name.
const (
	MaxSeriesParts = 12  // name parts
	MaxPartLength  = 64  // characters in a part
	MaxSeriesBytes = 256 // bytes in all
)

// ErrSeriesName is wrapped by every error of CheckSeries.
var ErrSeriesName = errors.New("not a series name")

// CheckSeries reports whether name is the name of a series: 1 to 12 parts
// joined by "/", each of 1 to 64 letters, digits, "-", "_" and ".", in at most
// 256 bytes. Letters and digits of every script are allowed.
func CheckSeries(name string) error {
	if len(name) > MaxSeriesBytes {
		return fmt.Errorf("%w: %d bytes, at most %d are allowed", ErrSeriesName, len(name), MaxSeriesBytes)
	}
	if !utf8.ValidString(name) {
		return fmt.Errorf("%w: not UTF-8", ErrSeriesName)
	}
	parts, length := 1, 0
	for _, c := range name {
		switch {
		case c == '/':
			if length == 0 {
				return fmt.Errorf("%w: part %d is empty", ErrSeriesName, parts)
			}
			parts++
			length = 0
			continue
		case !partCharacter(c):
			return fmt.Errorf("%w: %q is neither a letter, a digit, -, _, . nor the / between parts", ErrSeriesName, c)
		}
		length++
		if length > MaxPartLength {
			return fmt.Errorf("%w: part %d has more than %d characters", ErrSeriesName, parts, MaxPartLength)
		}
	}
	if length == 0 {
		return fmt.Errorf("%w: part %d is empty", ErrSeriesName, parts)
	}
	if parts > MaxSeriesParts {
		return fmt.Errorf("%w: %d parts, at most %d are allowed", ErrSeriesName, parts, MaxSeriesParts)
	}
	return nil
}

func partCharacter(c rune) bool {
	switch {
	case c >= 'a' && c <= 'z', c >= '0' && c <= '9', c == '-', c == '_', c == '.', c >= 'A' && c <= 'Z':
		return true
	case c < utf8.RuneSelf:
		return false
	}
	return unicode.IsLetter(c) || unicode.IsDigit(c)
}

// PartitionOf returns the partition of a series, from 0: the 32-bit FNV-1a
// hash of its first keyParts name parts, joined without a separator, modulo n.
// A series of fewer parts is hashed whole.
func PartitionOf(series string, keyParts, n int) int {
	const offset, prime = 2166136261, 16777619
	h := uint32(offset)
	for i := range len(series) {
		c := series[i]
		if c == '/' {
			keyParts--
			if keyParts == 0 {
				break
			}
			continue
		}
		h = (h ^ uint32(c)) * prime
	}
	if n <= 1 {
		return 0
	}
	return int(h % uint32(n))
}

// ErrPattern is wrapped by every error of CheckPattern.
var ErrPattern = errors.New("not a pattern of series names")

// CheckPattern reports whether the text is a pattern, see Pattern. The name of a
// series is one, and that of a sum.
func CheckPattern(text string) error {
	if problem := checkPattern(text); problem != "" {
		return fmt.Errorf("%w: %s", ErrPattern, problem)
	}
	return nil
}

// checkPattern says why text is no pattern, "" if it is one.
func checkPattern(text string) string {
	if len(text) > MaxSeriesBytes {
		return fmt.Sprintf("has %d bytes, at most %d are allowed", len(text), MaxSeriesBytes)
	}
	parts := strings.Split(text, "/")
	if len(parts) > MaxSeriesParts {
		return fmt.Sprintf("has %d parts, at most %d are allowed", len(parts), MaxSeriesParts)
	}
	for i, p := range parts {
		switch {
		case p == "":
			return fmt.Sprintf("part %d is empty", i+1)
		case p == "**" && i > 0 && parts[i-1] == "**":
			return "** stands twice in a row"
		case p == "**":
			continue
		case strings.Contains(p, "**"):
			return "** must be a whole part, * stands for characters within one"
		case strings.Count(p, "*") > 4:
			return fmt.Sprintf("part %d has more than four *", i+1)
		}
		for _, c := range p {
			if c != '*' && !partCharacter(c) {
				return fmt.Sprintf("%q can't be in a series name", c)
			}
		}
	}
	return ""
}
