package config

import (
	"strings"
	"testing"
	"time"
)

const adjustedText = `name = "x"
folder = "x"
[[indicator]]
name = "wound"
series = ["*/wound"]
expected = true
every = "1mo"
windows = ["12mo"]
p_limit = 0.001
baseline = { kind = "known", rate = 1.0 }
[[indicator]]
name = "infection"
series = ["*/infection"]
unit = "operations"
measure = "proportion"
every = "1w"
settle = "30d"
horizon = "120d"
follow_up = "30d"
windows = ["12w"]
p_limit = 0.001
baseline = { kind = "known", rate = 0.02 }
`

// TestAdjusted checks what is read, refused and doubted of expected events and
// follow-up.
func TestAdjusted(t *testing.T) {
	s := mustParse(t, adjustedText)
	if in := &s.Indicators[0]; !in.Expected || in.Unit != "expected events" {
		t.Errorf("%+v", in)
	}
	if s.Indicators[1].FollowUp != 30*24*time.Hour {
		t.Errorf("%+v", s.Indicators[1])
	}
	doubts := func(s *Setup) string {
		var all []string
		for _, f := range s.Doubts("x") {
			all = append(all, f.String())
		}
		return strings.Join(all, "\n")
	}
	if text := doubts(s); strings.Contains(text, "baseline") {
		t.Errorf("doubts: %s", text)
	}
	for _, c := range []struct{ from, to, want string }{
		{"rate = 1.0", "rate = 1.2", "of expected events 1 is usual"},
		{`settle = "30d"`, `settle = "7d"`, "recent slots will look better than they are"},
	} {
		if text := doubts(mustParse(t, strings.Replace(adjustedText, c.from, c.to, 1))); !strings.Contains(text, c.want) {
			t.Errorf("%s: %s", c.to, text)
		}
	}
	for _, c := range []struct{ from, to, want string }{
		{"expected = true", "expected = true\nper = 1000", "is not 1"},
		{"expected = true", "expected = true\nmeasure = \"proportion\"", "goes with a rate"},
		{"expected = true", "expected = 1", "expected"},
		{"measure = \"proportion\"\nevery", "every", "goes with a proportion"},
		{`horizon = "120d"`, `horizon = "29d"`, "horizon"},
	} {
		if _, err := Parse([]byte(strings.Replace(adjustedText, c.from, c.to, 1)), "x"); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%s: %v", c.to, err)
		}
	}
}
