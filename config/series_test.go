package config

import (
	"errors"
	"hash/fnv"
	"regexp"
	"strings"
	"testing"

	"pgregory.net/rapid"
)

func TestCheckSeries(t *testing.T) {
	part := strings.Repeat("a", MaxPartLength)
	good := []string{
		"a", "quillmere-east/ward-3/line-infection", "A.b_c-1/2", "1/2/3/4/5/6/7/8/9/10/11/12", part + "/" + part, "größe/病棟/отделение", "٣",
		strings.Repeat("ü", MaxPartLength),
	}
	for _, name := range good {
		if err := CheckSeries(name); err != nil {
			t.Errorf("%q: %v", name, err)
		}
	}
	bad := []string{
		"", "/", "a/", "/a", "a//b", "a b", "a\tb", "a\x00", "a*", "a>b", "a:b", "ward\u200b", "a\xff", part + "a",
		"1/2/3/4/5/6/7/8/9/10/11/12/13", strings.Repeat(part+"/", 4), strings.Repeat("ü", MaxPartLength+1), "a\u0301",
	}
	for _, name := range bad {
		if err := CheckSeries(name); !errors.Is(err, ErrSeriesName) {
			t.Errorf("%q: %v", name, err)
		}
	}
}

func TestCheckSeriesAllocatesNothing(t *testing.T) {
	if n := testing.AllocsPerRun(100, func() {
		if CheckSeries("quillmere-east/ward-3/line-infection") != nil {
			t.Error("refused")
		}
	}); n > 0 {
		t.Errorf("%v allocations", n)
	}
}

func TestPartitionOf(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		series := rapid.StringMatching(`[a-z0-9-]{1,8}(/[a-zü]{1,8}){0,5}`).Draw(t, "series")
		keyParts := rapid.IntRange(1, 7).Draw(t, "key parts")
		n := rapid.IntRange(1, 100).Draw(t, "n")
		parts := strings.Split(series, "/")
		h := fnv.New32a()
		if _, err := h.Write([]byte(strings.Join(parts[:min(keyParts, len(parts))], ""))); err != nil {
			t.Fatal(err)
		}
		if got, want := PartitionOf(series, keyParts, n), int(h.Sum32()%uint32(n)); got != want {
			t.Errorf("%s: %d, want %d", series, got, want)
		}
	})
	// The published FNV-1a 32 values of "a" and "foobar" (Noll's test vectors).
	if got := PartitionOf("a", 1, 1<<32-1); got != 0xe40c292c {
		t.Errorf("hash of a: %#x", got)
	}
	if got := PartitionOf("foobar/x", 1, 1<<32-1); got != 0xbf9cf968 {
		t.Errorf("hash of foobar: %#x", got)
	}
}

func TestPatternMatch(t *testing.T) {
	tests := []struct {
		pattern string
		yes, no []string
	}{
		{"**", []string{"a", "a/b/c"}, nil},
		{"*", []string{"a", "abc"}, []string{"a/b"}},
		{"*/*/fall", []string{"a/b/fall"}, []string{"a/fall", "a/b/c/fall", "a/b/falls"}},
		{"a/**", []string{"a", "a/b", "a/b/c"}, []string{"b", "ab"}},
		{"**/fall", []string{"fall", "a/fall", "a/b/fall"}, []string{"a/b", "fall/a"}},
		{"a/**/z", []string{"a/z", "a/b/z", "a/b/c/z", "a/z/z"}, []string{"a", "z", "a/b"}},
		{"**/b/**", []string{"b", "a/b", "b/c", "a/b/c"}, []string{"a/c"}},
		{"ward-*x*/f", []string{"ward-x/f", "ward-axb/f", "ward-xx/f"}, []string{"ward-/f", "ward/f"}},
		{"*ab*ab", []string{"abab", "abxab", "xababab"}, []string{"ab", "aab", "ababx"}},
	}
	for _, test := range tests {
		p := NewPattern(test.pattern)
		if problem := checkPattern(test.pattern); problem != "" {
			t.Errorf("%s: %s", test.pattern, problem)
		}
		for _, s := range test.yes {
			if !p.Match(s) {
				t.Errorf("%s does not match %s", p, s)
			}
		}
		for _, s := range test.no {
			if p.Match(s) {
				t.Errorf("%s matches %s", p, s)
			}
		}
	}
}

var (
	anyPattern = rapid.StringMatching(`(\*\*|[ab*]{1,3})(/(\*\*|[ab*]{1,3})){0,4}`).Filter(func(s string) bool { return checkPattern(s) == "" })
	anySeries  = rapid.StringMatching(`[ab]{1,3}(/[ab]{1,3}){0,4}`)
)

// patternRegexp is another way to match.
func patternRegexp(pattern string) *regexp.Regexp {
	expr := ""
	for part := range strings.SplitSeq(pattern, "/") {
		if part == "**" {
			expr += "(/[^/]+)*"
		} else {
			expr += "/" + strings.ReplaceAll(part, "*", "[^/]*")
		}
	}
	return regexp.MustCompile("^" + expr + "$")
}

func TestPatternAgainstRegexp(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		p, s := anyPattern.Draw(t, "pattern"), anySeries.Draw(t, "series")
		if got, want := NewPattern(p).Match(s), patternRegexp(p).MatchString("/"+s); got != want {
			t.Errorf("%s on %s: %v, want %v", p, s, got, want)
		}
	})
}

func TestOverlap(t *testing.T) {
	rapid.Check(t, func(t *rapid.T) {
		a, b := NewPattern(anyPattern.Draw(t, "a")), NewPattern(anyPattern.Draw(t, "b"))
		example, both := overlap(a, b)
		if both {
			if err := CheckSeries(example); err != nil || !a.Match(example) || !b.Match(example) {
				t.Fatalf("%s and %s: the example %s is none (%v)", a, b, example, err)
			}
			return
		}
		for range 50 {
			if s := anySeries.Draw(t, "series"); a.Match(s) && b.Match(s) {
				t.Fatalf("%s and %s both match %s", a, b, s)
			}
		}
	})
}

// TestPatternTime would not end if matching went back over every star.
func TestPatternTime(t *testing.T) {
	name := strings.Repeat("a", MaxPartLength)
	if NewPattern("*a*a*a*b").Match(name) {
		t.Error("matches")
	}
	many := strings.TrimSuffix(strings.Repeat("**/*a*a*a*b/", 6), "/")
	if _, both := overlap(NewPattern(many), NewPattern(strings.TrimSuffix(strings.Repeat("**/*a*a*a*c/", 6), "/"))); both {
		t.Error("overlap")
	}
}

func FuzzCheckSeries(f *testing.F) {
	f.Add("quillmere-east/ward-3/line-infection")
	f.Add("größe/病棟")
	f.Add("a//b")
	// The rule of the documentation, written as one expression.
	rule := regexp.MustCompile(`^[\p{L}\p{Nd}_.-]{1,64}(/[\p{L}\p{Nd}_.-]{1,64}){0,11}$`)
	f.Fuzz(func(t *testing.T, name string) {
		want := len(name) <= MaxSeriesBytes && rule.MatchString(name)
		if got := CheckSeries(name) == nil; got != want {
			t.Errorf("%q: %v, want %v", name, got, want)
		}
	})
}
