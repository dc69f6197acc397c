package config

import (
	"strings"
	"testing"
)

func TestSumNames(t *testing.T) {
	for _, test := range []struct{ sum, series, want string }{
		{"{site}/*/fall", "east/ward-1/fall", "east/*/fall"},
		{"*/*/fall", "east/ward-1/fall", "*/*/fall"},
		{"{site}/*/{what}", "east/ward-1/fall", "east/*/fall"},
		{"east/ward-*/fall", "east/ward-1/fall", "east/ward-*/fall"},
		{"{site}/**", "east/3/ward-1/fall", "east/**"},
		{"{site}/*/fall", "east/ward-1/bed/fall", ""},
		{"{site}/*/fall", "east/ward-1/error", ""},
	} {
		got, ok := NewSum(test.sum).NameFor(test.series)
		if got != test.want || ok != (test.want != "") {
			t.Errorf("sum %q of %q: %q, want %q", test.sum, test.series, got, test.want)
		}
		if ok && CheckSeries(got) == nil {
			t.Errorf("a series can be called %q, like a sum", got)
		}
	}
}

func TestSumsThatMeanNothing(t *testing.T) {
	for text, want := range map[string]string{
		"{site}/ward-1/fall":  "sum of one series",
		"**/{ward}/fall":      "behind **",
		"{}/*/fall":           "no plain word",
		"{a*}/*/fall":         "no plain word",
		"a//*":                "part 2 is empty",
		"{site}/wa{x}rd*/fal": "can't be in a series name",
	} {
		if got := checkSum(text); !strings.Contains(got, want) {
			t.Errorf("%q: %q, want something with %q", text, got, want)
		}
	}
}

const sumsSetup = `
name = "x"
folder = "x"
partitions = %P
[[indicator]]
name = "fall"
series = ["*/*/fall"]
sums = [%S]
unit = "bed-days"
every = "1d"
windows = ["7d"]
p_limit = 0.001
[[indicator.baseline]]
sums = "%B"
kind = "known"
rate = 0.02
[[indicator.baseline]]
kind = "known"
rate = 0.01
`

func parseSums(partitions, sums, base string) (*Setup, error) {
	text := strings.NewReplacer("%P", partitions, "%S", sums, "%B", base).Replace(sumsSetup)
	return Parse([]byte(text), "set-up")
}

func TestSumsHaveBaselinesOfTheirOwn(t *testing.T) {
	s, err := parseSums("1", `"{site}/*/fall", "*/*/fall"`, "east/*/fall")
	if err != nil {
		t.Fatal(err)
	}
	in := &s.Indicators[0]
	for name, want := range map[string]float64{"east/*/fall": 0.02, "west/*/fall": 0.01, "*/*/fall": 0.01, "east/ward-1/fall": 0.01} {
		if got := in.BaselineFor(name).Rate; got != want {
			t.Errorf("%s is judged by %g, want %g", name, got, want)
		}
	}
}

func TestSumsThatCanNotBeKept(t *testing.T) {
	for _, test := range []struct{ partitions, sums, base, want string }{
		{"1", `"*/*/error"`, "*/*/error", "matches no series"},
		{"1", `"{site}/*/fall"`, "a/*/error", "matches no sum"},
	} {
		_, err := parseSums(test.partitions, test.sums, test.base)
		if err == nil || !strings.Contains(err.Error(), test.want) {
			t.Errorf("%v: error %v, want something with %q", test, err, test.want)
		}
	}
}

// TestGatheredSums checks which sums may have members in several partitions,
// and where they and all others are held.
func TestGatheredSums(t *testing.T) {
	s, err := parseSums("4", `"{site}/*/fall", "*/*/fall", "**/fall"`, "*/*/fall")
	if err != nil {
		t.Fatal(err)
	}
	in := &s.Indicators[0]
	var got []string
	for _, m := range in.Gathered(1) {
		got = append(got, m.String())
	}
	if want := "*/*/fall **/fall"; strings.Join(got, " ") != want {
		t.Errorf("gathered are %q, want %q", got, want)
	}
	if n := len(in.Gathered(2)); n != 3 {
		t.Errorf("%d are gathered by two parts of the name, want 3", n)
	}
	for name, want := range map[string]int{
		"east/ward-1/fall": PartitionOf("east", 1, 4), "east/*/fall": PartitionOf("east", 1, 4),
		"*/*/fall": s.HomeOf("fall"), "**/fall": s.HomeOf("fall"),
	} {
		if got := s.PartitionOf(name); got != want {
			t.Errorf("%s is in partition %d, want %d", name, got, want)
		}
	}
	for _, series := range []string{"east/*/fall", "x/*/fall"} {
		if !NewSum("{site}/*/fall").Makes(series) {
			t.Errorf("no series is summed as %s", series)
		}
	}
	for _, series := range []string{"*/*/fall", "east/ward-1/fall", "east/*/error", "east/*"} {
		if NewSum("{site}/*/fall").Makes(series) {
			t.Errorf("a series is summed as %s", series)
		}
	}
}
