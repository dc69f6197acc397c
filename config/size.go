package config

import (
	"errors"
	"fmt"
	"math"
	"strconv"
	"strings"
)

// ErrSizeSyntax is returned for a text that is no size.
var ErrSizeSyntax = errors.New(`not a whole number and a unit such as "512KiB", "1MiB" or "4GiB"`)

var sizeUnits = []struct {
	name  string
	bytes int64
}{
	{"TiB", 1 << 40},
	{"GiB", 1 << 30},
	{"MiB", 1 << 20},
	{"KiB", 1 << 10},
	{"TB", 1e12},
	{"GB", 1e9},
	{"MB", 1e6},
	{"kB", 1e3},
	{"B", 1},
}

// ParseSize reads a size in bytes: a whole number and one of the units B, KiB,
// MiB, GiB, TiB (powers of 1024) or kB, MB, GB, TB (powers of 1000).
func ParseSize(s string) (int64, error) {
	for _, u := range sizeUnits {
		digits, found := strings.CutSuffix(s, u.name)
		if !found {
			continue
		}
		n, err := strconv.ParseUint(strings.TrimRight(digits, " "), 10, 63)
		if err != nil || int64(n) > math.MaxInt64/u.bytes {
			return 0, ErrSizeSyntax
		}
		return int64(n) * u.bytes, nil
	}
	return 0, ErrSizeSyntax
}

// exactSize writes a size in bytes as ParseSize reads it.
func exactSize(n int64) string {
	text := FormatSize(n)
	if back, err := ParseSize(text); err != nil || back != n {
		return fmt.Sprintf("%dB", n)
	}
	return text
}

// FormatSize writes a size in bytes for people: exact if it is a whole number
// of a binary unit, else with three figures.
func FormatSize(n int64) string {
	for _, u := range sizeUnits[:4] {
		switch {
		case n >= u.bytes && n%u.bytes == 0:
			return fmt.Sprintf("%d%s", n/u.bytes, u.name)
		case n >= u.bytes && n/u.bytes >= 1000:
			return fmt.Sprintf("%d%s", n/u.bytes, u.name)
		case n >= u.bytes:
			return fmt.Sprintf("%.3g%s", float64(n)/float64(u.bytes), u.name)
		}
	}
	return fmt.Sprintf("%dB", n)
}
