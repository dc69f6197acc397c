package config

import (
	"errors"
	"testing"
	"time"

	"pgregory.net/rapid"
)

func TestParseSpan(t *testing.T) {
	good := map[string]Every{
		"1m": {1, Minute}, "15m": {15, Minute}, "1h": {1, Hour}, "28d": {28, Day}, "1w": {1, Week},
		"3mo": {3, Month}, "12mo": {12, Month}, "1y": {1, Year}, "1000000y": {1_000_000, Year},
	}
	for text, want := range good {
		if got, err := ParseSpan(text); err != nil || got != want {
			t.Errorf("ParseSpan(%q) = %v, %v", text, got, err)
		}
	}
	bad := map[string]error{
		"": ErrSpanSyntax, "d": ErrSpanSyntax, "0d": ErrSpanSyntax, "01d": ErrSpanSyntax, "-1d": ErrSpanSyntax, "1.5d": ErrSpanSyntax,
		"1 d": ErrSpanSyntax, "1D": ErrSpanSyntax, "1s": ErrSpanSyntax, "1mon": ErrSpanSyntax, "1h30m": ErrSpanSyntax,
		"1000001d": ErrSpanRange, "99999999999999999999d": ErrSpanRange,
	}
	for text, want := range bad {
		if got, err := ParseSpan(text); !errors.Is(err, want) {
			t.Errorf("ParseSpan(%q) = %v, %v, want %v", text, got, err, want)
		}
	}
}

func TestSpanRoundTrip(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		want := Every{rapid.IntRange(1, maxSpanCount).Draw(t, "n"), Unit(rapid.IntRange(int(Minute), int(Year)).Draw(t, "unit"))}
		if got, err := ParseSpan(want.String()); err != nil || got != want {
			t.Errorf("%s: %v, %v", want, got, err)
		}
	})
}

func TestParseDuration(t *testing.T) {
	good := map[string]time.Duration{
		"0": 0, "0s": 0, "0d": 0, "90s": 90 * time.Second, "5m": 5 * time.Minute, "36h": 36 * time.Hour, "2d": 48 * time.Hour, "1w": 168 * time.Hour,
	}
	for text, want := range good {
		if got, err := ParseDuration(text); err != nil || got != want {
			t.Errorf("ParseDuration(%q) = %v, %v", text, got, err)
		}
	}
	bad := map[string]error{
		"": ErrSpanSyntax, "1": ErrSpanSyntax, "1.5h": ErrSpanSyntax, "1ms": ErrSpanSyntax, "-1d": ErrSpanSyntax,
		"1mo": ErrNoFixedLength, "1y": ErrNoFixedLength, "1000000w": ErrSpanRange,
	}
	for text, want := range bad {
		if got, err := ParseDuration(text); !errors.Is(err, want) {
			t.Errorf("ParseDuration(%q) = %v, %v, want %v", text, got, err, want)
		}
	}
}

func TestDurationRoundTrip(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		want := time.Duration(rapid.Int64Range(0, maxSpanCount).Draw(t, "seconds")) * time.Second
		if got, err := ParseDuration(FormatDuration(want)); err != nil || got != want {
			t.Errorf("%s: %v, %v", want, got, err)
		}
	})
}

func TestSlots(t *testing.T) {
	slots := []Every{
		{1, Minute},
		{2, Minute},
		{3, Minute},
		{4, Minute},
		{5, Minute},
		{6, Minute},
		{10, Minute},
		{12, Minute},
		{15, Minute},
		{20, Minute},
		{30, Minute},
		{1, Hour},
		{1, Day},
		{1, Week},
		{1, Month},
		{3, Month},
		{1, Year},
	}
	found := 0
	for u := Minute; u <= Year; u++ {
		for n := 1; n <= 100; n++ {
			if checkSlot(Every{n, u}) == "" {
				if found >= len(slots) || slots[found] != (Every{n, u}) {
					t.Fatalf("%v is a slot", Every{n, u})
				}
				found++
			}
		}
	}
	if found != len(slots) {
		t.Errorf("%d slots of %d", found, len(slots))
	}
}

func TestSlotsOf(t *testing.T) {
	tests := []struct {
		span, slot string
		want       int // 0: refused
	}{
		{"1h", "15m", 4},
		{"1d", "15m", 96},
		{"1w", "1m", 10080},
		{"50m", "15m", 0},
		{"1mo", "15m", 0},
		{"1y", "30m", 0},
		{"1d", "1h", 24},
		{"120m", "1h", 2},
		{"90m", "1h", 0},
		{"1mo", "1h", 0},
		{"7d", "1d", 7},
		{"1w", "1d", 7},
		{"24h", "1d", 0},
		{"1440m", "1d", 0},
		{"1mo", "1d", 0},
		{"1y", "1d", 0},
		{"4w", "1w", 4},
		{"28d", "1w", 4},
		{"10d", "1w", 0},
		{"168h", "1w", 0},
		{"1mo", "1w", 0},
		{"12mo", "1mo", 12},
		{"1y", "1mo", 12},
		{"30d", "1mo", 0},
		{"4w", "1mo", 0},
		{"720h", "1mo", 0},
		{"3mo", "3mo", 1},
		{"1y", "3mo", 4},
		{"4mo", "3mo", 0},
		{"90d", "3mo", 0},
		{"5y", "1y", 5},
		{"24mo", "1y", 2},
		{"18mo", "1y", 0},
		{"365d", "1y", 0},
		{"52w", "1y", 0},
	}
	for _, test := range tests {
		span, err := ParseSpan(test.span)
		if err != nil {
			t.Fatal(err)
		}
		slot, err := ParseSpan(test.slot)
		if err != nil {
			t.Fatal(err)
		}
		got, problem := slotsOf(span, slot)
		if got != test.want || (problem == "") != (test.want > 0) {
			t.Errorf("%s in slots of %s: %d (%s), want %d", test.span, test.slot, got, problem, test.want)
		}
	}
}

// TestSlotsOfAddUp: k slots written in the slot's own unit are k slots.
func TestSlotsOfAddUp(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		slot := rapid.SampledFrom([]Every{{1, Minute}, {15, Minute}, {1, Hour}, {1, Day}, {1, Week}, {1, Month}, {3, Month}, {1, Year}}).Draw(t, "slot")
		k := rapid.IntRange(1, maxSlots).Draw(t, "k")
		if got, problem := slotsOf(Every{slot.N * k, slot.Unit}, slot); got != k {
			t.Errorf("%d slots of %s: %d (%s)", k, slot, got, problem)
		}
	})
}

func TestParseSize(t *testing.T) {
	good := map[string]int64{
		"0B": 0, "1B": 1, "512KiB": 512 << 10, "1MiB": 1 << 20, "4GiB": 4 << 30, "1TiB": 1 << 40, "1kB": 1000, "2MB": 2e6, "2 GB": 2e9, "1TB": 1e12,
	}
	for text, want := range good {
		if got, err := ParseSize(text); err != nil || got != want {
			t.Errorf("ParseSize(%q) = %d, %v", text, got, err)
		}
	}
	for _, text := range []string{"", "1", "B", "-1B", "1.5GiB", "1gib", "1 G", "+1B", "99999999TiB", "9999999999999999999B"} {
		if got, err := ParseSize(text); !errors.Is(err, ErrSizeSyntax) {
			t.Errorf("ParseSize(%q) = %d, %v", text, got, err)
		}
	}
	for n, want := range map[int64]string{0: "0B", 1023: "1023B", 1 << 20: "1MiB", 3 << 29: "1.5GiB", 1<<40 + 1: "1TiB", 1234: "1.21KiB"} {
		if got := FormatSize(n); got != want {
			t.Errorf("FormatSize(%d) = %s, want %s", n, got, want)
		}
	}
}
