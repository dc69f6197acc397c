package config

import (
	"bytes"
	"fmt"
	"regexp"
)

var (
	partitionsLine = regexp.MustCompile(`(?m)^([ \t]*)partitions([ \t]*)=([ \t]*)[0-9_]+`)
	firstTable     = regexp.MustCompile(`(?m)^[ \t]*\[`)
)

// WithPartitions returns the text of a set-up with another number of
// partitions. Nothing else of it changes.
func WithPartitions(text []byte, n int) []byte {
	top := text
	if at := firstTable.FindIndex(text); at != nil {
		top = text[:at[0]]
	}
	if partitionsLine.Match(top) {
		changed := partitionsLine.ReplaceAll(top, fmt.Appendf(nil, "${1}partitions${2}=${3}%d", n))
		return append(changed, text[len(top):]...)
	}
	return append(fmt.Appendf(nil, "partitions = %d\n", n), bytes.Clone(text)...)
}
