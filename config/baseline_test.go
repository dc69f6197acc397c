package config

import (
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
)

// several is plain with the first of several baselines.
func several(stanza, baselines string) string {
	return strings.Replace(plain(stanza, baselines), "[indicator.baseline]", "[[indicator.baseline]]", 1)
}

func TestBaselineAt(t *testing.T) {
	in := &mustParse(t, several(`zone = "Europe/Berlin"`, `series = "quillmere/a/*"
kind = "known"
rate = 1
from = 2025-01-01
to = 2026-01-01
version = "a 2025"
[[indicator.baseline]]
kind = "known"
rate = 1
to = "2025-06-01T00:00:00Z"
version = "old"
[[indicator.baseline]]
kind = "known"
rate = 1
from = "2025-07-01"
version = "new"
`)).Indicators[0]
	for _, test := range []struct{ series, boundary, want string }{
		// A window that ends where 2025 begins holds nothing of it.
		{"quillmere/a/fall", "2025-01-01T00:00:00+01:00", "old"},
		{"quillmere/a/fall", "2025-01-01T00:00:00.000001+01:00", "a 2025"},
		{"quillmere/a/fall", "2025-06-15T00:00:00+02:00", "a 2025"},
		{"quillmere/a/fall", "2026-01-01T00:00:00+01:00", "a 2025"},
		{"quillmere/a/fall", "2026-01-02T00:00:00+01:00", "new"},
		{"quillmere/b/fall", "2025-06-01T00:00:00Z", "old"},
		{"quillmere/b/fall", "2025-06-02T00:00:00Z", ""},
		{"quillmere/b/fall", "2025-07-01T00:00:00+02:00", ""},
		{"quillmere/b/fall", "2025-07-02T00:00:00+02:00", "new"},
	} {
		boundary, err := time.Parse(time.RFC3339Nano, test.boundary)
		if err != nil {
			t.Fatal(err)
		}
		got := ""
		if b := in.BaselineAt(test.series, boundary); b != nil {
			got = b.Version
		}
		if got != test.want {
			t.Errorf("%s at %s: %q, want %q", test.series, test.boundary, got, test.want)
		}
	}
}

func TestUncovered(t *testing.T) {
	day := func(n int) time.Time { return time.Date(2026, 1, n, 0, 0, 0, 0, time.UTC) }
	var open time.Time
	all, other := NewPattern("**"), NewPattern("a")
	for name, test := range map[string]struct {
		baselines []Baseline
		want      [][2]time.Time
	}{
		"open":    {[]Baseline{{Series: all}}, nil},
		"from":    {[]Baseline{{Series: all, From: day(1)}}, [][2]time.Time{{open, day(1)}}},
		"to":      {[]Baseline{{Series: all, To: day(1)}}, [][2]time.Time{{day(1), open}}},
		"both":    {[]Baseline{{Series: all, From: day(1), To: day(2)}}, [][2]time.Time{{open, day(1)}, {day(2), open}}},
		"joined":  {[]Baseline{{Series: all, From: day(2)}, {Series: all, To: day(2)}}, nil},
		"nested":  {[]Baseline{{Series: all, From: day(3), To: day(4)}, {Series: all, To: day(9)}, {Series: all, From: day(9)}}, nil},
		"gap":     {[]Baseline{{Series: all, To: day(2)}, {Series: all, From: day(3)}}, [][2]time.Time{{day(2), day(3)}}},
		"other's": {[]Baseline{{Series: other, To: day(5)}, {Series: all, From: day(3)}}, [][2]time.Time{{open, day(3)}}},
	} {
		in := Indicator{Baselines: test.baselines}
		if diff := cmp.Diff(test.want, in.uncovered()); diff != "" {
			t.Errorf("%s: %s", name, diff)
		}
	}
}

func TestDelayAt(t *testing.T) {
	const h = time.Hour
	d := &Delay{Ages: []time.Duration{h, 2 * h, 9 * h}, Reported: []float64{0.25, 0.5, 1}}
	for age, want := range map[time.Duration]float64{
		-h: 0, 0: 0, h - 1: 0, h: 0.25, 2*h - 1: 0.25, 2 * h: 0.5, 9*h - 1: 0.5, 9 * h: 1, 900 * h: 1,
	} {
		if got := d.At(age); got != want {
			t.Errorf("F(%v) = %v, want %v", age, got, want)
		}
	}
	if none := (*Delay)(nil); none.At(0) != 1 {
		t.Error("without a delay all is known at once")
	}
}

func TestStrataAt(t *testing.T) {
	zone, err := LoadZone("Europe/Berlin")
	if err != nil {
		t.Fatal(err)
	}
	numbered := func(by StrataBy) *Strata {
		st := &Strata{By: by, Factors: make([]float64, strataCounts[by])}
		for i := range st.Factors {
			st.Factors[i] = float64(i + 1)
		}
		return st
	}
	monday := time.Date(2026, 3, 2, 0, 0, 0, 0, zone)
	sunday := time.Date(2026, 12, 6, 23, 59, 0, 0, zone)
	for _, test := range []struct {
		by    StrataBy
		local time.Time
		want  float64
	}{
		{ByHourOfWeek, monday, 1},
		{ByHourOfWeek, sunday, 168},
		{ByHourOfWeek, monday.Add(26 * time.Hour), 27},
		{ByWeekday, monday, 1},
		{ByWeekday, sunday, 7},
		{ByMonth, monday, 3},
		{ByMonth, sunday, 12},
	} {
		if got := numbered(test.by).At(test.local); got != test.want {
			t.Errorf("%v by %v: %v, want %v", test.local, test.by, got, test.want)
		}
	}
	if none := (*Strata)(nil); none.At(monday) != 1 {
		t.Error("without strata the factor is 1")
	}
}

// TestEstimated checks what the keys of a history mean in slots.
func TestEstimated(t *testing.T) {
	text := `kind = "trailing"
span = "52w"
gap = "35d"
refresh = "1w"
min_events = 10
spread = 1.5
strata = { by = "weekday", factors = [1, 1, 1, 1, 1, 0.5, 1.5] }
`
	want := Baseline{
		Series: NewPattern("**"), Kind: Trailing, SpanSlots: 364, GapSlots: 35, Refresh: Every{1, Week}, MinEvents: 10,
		Margin: 1, Spread: 1.5, Strata: &Strata{By: ByWeekday, Factors: []float64{1, 1, 1, 1, 1, 0.5, 1.5}},
	}
	samePattern := cmp.Comparer(func(a, b Pattern) bool { return a == b })
	if diff := cmp.Diff(want, mustParse(t, plain("", text)).Indicators[0].Baselines[0], samePattern); diff != "" {
		t.Error(diff)
	}
	want = Baseline{Series: NewPattern("**"), Kind: Trailing, SpanSlots: 364, GapSlots: 28, Refresh: Every{1, Month}, MinEvents: 1, Margin: 1, Spread: 1}
	if diff := cmp.Diff(want, mustParse(t, plain("", "kind = \"trailing\"\nspan = \"364d\"")).Indicators[0].Baselines[0], samePattern); diff != "" {
		t.Error("defaults", diff)
	}
	years := strings.NewReplacer(`"1d"`, `"1y"`, `"28d"`, `"2y"`).Replace(plain("", "kind = \"peers\"\nspan = \"5y\"\ndelay = { ages = [\"0\", \"60d\"], reported = [0.5, 1.0] }"))
	want = Baseline{
		Series: NewPattern("**"), Kind: Peers, SpanSlots: 5, Refresh: Every{1, Year}, MinEvents: 1, Margin: 1, Spread: 1,
		Delay: &Delay{Ages: []time.Duration{0, 60 * 24 * time.Hour}, Reported: []float64{0.5, 1}},
	}
	if diff := cmp.Diff(want, mustParse(t, years).Indicators[0].Baselines[0], samePattern); diff != "" {
		t.Error("years", diff)
	}
}

// TestHistoryMemory checks that the estimate counts the slots that a history
// makes the engine keep.
func TestHistoryMemory(t *testing.T) {
	bytes := func(baseline string) int64 { return mustParse(t, several("", baseline)).Memory().Series[0] }
	usual := bytes("kind = \"known\"\nrate = 2\n")
	// A month is at most 31 days, 744 hours, in slots of at least 23 hours: 33.
	for baseline, kept := range map[string]int64{
		"kind = \"trailing\"\nspan = \"364d\"\n":                                       33 + 28 + 364,
		"kind = \"trailing\"\nspan = \"364d\"\ngap = \"100d\"\n":                       33 + 100 + 364,
		"kind = \"trailing\"\nspan = \"364d\"\ngap = \"100d\"\nrefresh = \"1d\"\n":     2 + 100 + 364,
		"kind = \"peers\"\nspan = \"728d\"\n":                                          33 + 728,
		"kind = \"reference\"\nevents = 3\nexposure = 10\nspread = 2\n":                28,
		"kind = \"trailing\"\nspan = \"1d\"\ngap = \"1d\"\nrefresh = \"1d\"\n":         28,
		"kind = \"trailing\"\nspan = \"28d\"\nto = 2026-01-01\n" + open2026("\"56d\""): 33 + 28 + 56,
	} {
		if got := (bytes(baseline) - usual) / bytesPerCell; got != kept-28 {
			t.Errorf("%s: %d slots more than without, want %d", baseline, got, kept-28)
		}
	}
	if _, err := Parse([]byte(plain("", "kind = \"trailing\"\nspan = \"100000d\"\n")), "test.toml"); err == nil || !strings.Contains(err.Error(), "limits.memory") {
		t.Errorf("a history of 100,000 days for 20,000 series: %v", err)
	}
}

// open2026 is a second baseline, valid from 2026 on.
func open2026(span string) string {
	return "[[indicator.baseline]]\nkind = \"trailing\"\nfrom = 2026-01-01\nspan = " + span + "\n"
}

func TestCompareHistory(t *testing.T) {
	known := mustParse(t, plain("", "kind = \"known\"\nrate = 2\nversion = \"1\"\n"))
	trailing := func(span string) *Setup {
		return mustParse(t, plain("", "kind = \"trailing\"\nspan = \""+span+"\"\nversion = \""+span+"\"\n"))
	}
	for _, test := range []struct {
		from, to *Setup
		want     Class
	}{
		{known, trailing("364d"), Filling},
		{trailing("364d"), trailing("728d"), Filling},
		{trailing("728d"), trailing("364d"), NextLook},
		{trailing("364d"), known, NextLook},
	} {
		changes := Compare(test.from, test.to)
		if len(changes) != 1 || changes[0].Class != test.want {
			t.Errorf("%v, want %v", changes, test.want)
		}
	}
}

func TestOnePartition(t *testing.T) {
	for _, test := range []struct {
		patterns string
		keyParts int
		want     bool
	}{
		{"a/*", 1, true},
		{"a/**", 1, true},
		{"a/**", 2, false},
		{"a/b/** a/b/c", 2, true},
		{"a/* b/*", 1, false},
		{"*/a", 1, false},
		{"**", 1, false},
		{"a", 3, true},
		{"a*/x", 1, false},
	} {
		var patterns []Pattern
		for p := range strings.FieldsSeq(test.patterns) {
			patterns = append(patterns, NewPattern(p))
		}
		if got := onePartition(patterns, test.keyParts); got != test.want {
			t.Errorf("%s by %d parts: %v", test.patterns, test.keyParts, got)
		}
	}
}

func TestPeersOfTwo(t *testing.T) {
	two := strings.Replace(plain("", "kind = \"peers\"\nspan = \"364d\"\n"), `"quillmere/*/fall"`, `"quillmere/a/fall", "quillmere/b/fall"`, 1)
	mustParse(t, two)
}

func TestShortList(t *testing.T) {
	long := make([]float64, 168)
	first := shortList(long)
	long[80] = 1
	if second := shortList(long); first == second || len(second) > 60 {
		t.Errorf("%s and %s", first, second)
	}
	if got := shortList([]float64{0.5, 1}); got != "0.5 1" {
		t.Error(got)
	}
}
