package config

import (
	"errors"
	"math"
	"os"
	"strings"
	"testing"
)

// parseFile reads a set-up.
func parseFile(t *testing.T, file string) (*Setup, error) {
	t.Helper()
	text, err := os.ReadFile(file)
	if err != nil {
		t.Fatal(err)
	}
	return Parse(text, file[strings.LastIndex(file, "/")+1:])
}

func TestAllowanceFaults(t *testing.T) {
	s, err := parseFile(t, "testdata/allowance/faults.toml")
	if err == nil || s != nil {
		t.Fatalf("no fault found: %v", s)
	}
	compareGolden(t, "testdata/allowance/faults.txt", err.Error()+"\n")
}

// TestAllowance describes set-ups with allowances, and doubts them.
func TestAllowance(t *testing.T) {
	s, err := parseFile(t, "testdata/allowance/sound.toml")
	if err != nil {
		t.Fatal(err)
	}
	var b strings.Builder
	if err := s.Describe(&b); err != nil {
		t.Fatal(err)
	}
	for _, d := range s.Doubts("sound.toml") {
		b.WriteString("doubtful: " + d.String() + "\n")
	}
	compareGolden(t, "testdata/allowance/sound.txt", b.String())
	want := []Allowance{
		{Alerts: 1, Every: Every{5, Year}},
		{Alerts: 2.5, Every: Every{12, Month}, PerIndicator: true, Assurance: 0.9, Reserve: 0.25},
		{Alerts: 1, Every: Every{1, Week}},
		{Alerts: 1, Every: Every{1, Hour}, PerIndicator: true, Reserve: 0.1},
	}
	for i, in := range s.Indicators {
		if *in.Allowance != want[i] || in.PLimit != 0 {
			t.Errorf("%s: %+v and p_limit %v, want %+v", in.Name, in.Allowance, in.PLimit, want[i])
		}
		checkSetup(t, s)
	}
	if in := s.Indicators[1]; !in.SlotLooks || !in.ArrivalLooks {
		t.Errorf("looks: %+v", in)
	}
	if in := s.Indicators[2]; in.SlotLooks || !in.ArrivalLooks {
		t.Errorf("looks: %+v", in)
	}
}

func TestCompareAllowance(t *testing.T) {
	before, err := parseFile(t, "testdata/allowance/sound.toml")
	if err != nil {
		t.Fatal(err)
	}
	for _, test := range []struct{ from, to, want string }{
		{`allowance = "1 in 5y"`, `allowance = "2 in 5y"`, "indicator[falls].allowance: 1 in 5y -> 2 in 5y (next look): critical counts are computed anew"},
		{`allowance = "1 in 5y"`, `p_limit = 0.01`, "indicator[falls].p_limit: nothing -> 0.01 (next look)\n" +
			"indicator[falls].allowance: 1 in 5y -> nothing (next look): critical counts are computed anew"},
		{`assurance = 0.9`, ``, "indicator[needles].assurance: 0.9 -> nothing (next look)"},
		{`looks = ["arrival", "slot"]`, ``, "indicator[needles].looks: slot, arrival -> slot (next look)"},
		{`looks = "arrival"`, `looks = ["slot", "arrival"]`, "indicator[restarts].looks: arrival -> slot, arrival (next look)"},
	} {
		text := strings.Replace(string(before.Text), test.from, test.to, 1)
		after, err := parse([]byte(text), &collector{})
		if err != nil {
			t.Fatal(err)
		}
		var lines []string
		for _, c := range Compare(before, after) {
			lines = append(lines, c.String())
		}
		if got := strings.Join(lines, "\n"); got != test.want {
			t.Errorf("%s -> %s:\n got %s\nwant %s", test.from, test.to, got, test.want)
		}
		// The other way round arrival looks have to fill.
		if strings.Contains(test.from, "arrival\", \"slot") && Compare(after, before)[0].Class != Filling {
			t.Error("arrival looks don't fill")
		}
	}
}

func TestParseAllowance(t *testing.T) {
	for text, perYear := range map[string]float64{
		"1 in 5y": 0.2, "2 in 1y": 2, "0.5 in 12mo": 0.5, "1e2 in 1y": 100, "1 in 1w": 365.2425 / 7, "1 in 30m": 365.2425 * 48, "1 in 1h": 365.2425 * 24,
	} {
		a, err := ParseAllowance(text)
		if err != nil || math.Abs(a.PerYear()-perYear) > 1e-12*perYear {
			t.Errorf("%s: %v a year, want %v; %v", text, a.PerYear(), perYear, err)
		}
		back, err := ParseAllowance(a.String())
		if err != nil || back != a {
			t.Errorf("%s: %s read back: %v, %v", text, a.String(), back, err)
		}
	}
	for _, text := range []string{"", "1", "1 per 5y", "1 in 5", "-1 in 5y", "1 in 0y", "1  in 5y", "1 in 5y ", "1 in a year", "NaN in 1y", "01 in 1y"} {
		if _, err := ParseAllowance(text); !errors.Is(err, ErrAllowanceSyntax) {
			t.Errorf("%q: %v", text, err)
		}
	}
	for _, text := range []string{"0 in 5y", "1000001 in 1y", "0.0 in 1d"} {
		if _, err := ParseAllowance(text); !errors.Is(err, ErrAllowanceRange) {
			t.Errorf("%q: %v", text, err)
		}
	}
}

// TestCountsAcross says of which indicators partitions count for each other: it does
// not depend on how many there are.
func TestCountsAcross(t *testing.T) {
	const text = `name = "x"
partitions = 4
[[indicator]]
name = "falls"
series = ["*/fall"]
unit = "bed-days"
every = "1d"
windows = ["28d"]
allowance = "1 in 1y"
allowance_for = "indicator"
[indicator.baseline]
kind = "known"
rate = 1
`
	const peers = "kind = \"peers\"\nspan = \"56d\"\n"
	for changed, want := range map[string]bool{
		text: true,
		strings.Replace(text, "partitions = 4", "partitions = 1", 1):                                                       true,
		strings.Replace(text, `"*/fall"`, `"east/*"`, 1):                                                                   false,
		strings.Replace(text, `"*/fall"`, `"east/*", "west/*"`, 1):                                                         true,
		strings.Replace(text, `"*/fall"]`, "\"east/*\"]\nsums = [\"*/fall\"]", 1):                                          true,
		strings.Replace(text, `allowance_for = "indicator"`, `allowance_for = "series"`, 1):                                false,
		strings.Replace(strings.Replace(text, `= "indicator"`, `= "series"`, 1), "kind = \"known\"\nrate = 1\n", peers, 1): true,
	} {
		setup, err := Parse([]byte(changed), "x.toml")
		if err != nil {
			t.Errorf("%v\n%s", err, changed)
			continue
		}
		if got := setup.Indicators[0].CountsAcross(setup.KeyParts); got != want {
			t.Errorf("counts across: %t\n%s", got, changed)
		}
		if got := setup.TellsAcross(); got != (want && setup.Partitions > 1) {
			t.Errorf("tells across: %t\n%s", got, changed)
		}
	}
}
