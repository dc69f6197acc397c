package config

import (
	"strings"
	"testing"
)

func TestTrialsFaults(t *testing.T) {
	s, err := parseFile(t, "testdata/trials/faults.toml")
	if err == nil || s != nil {
		t.Fatalf("no fault found: %v", s)
	}
	compareGolden(t, "testdata/trials/faults.txt", err.Error()+"\n")
}

// TestTrials describes set-ups with windows of trials.
func TestTrials(t *testing.T) {
	s, err := parseFile(t, "testdata/trials/sound.toml")
	if err != nil {
		t.Fatal(err)
	}
	checkSetup(t, s)
	var b strings.Builder
	if err := s.Describe(&b); err != nil {
		t.Fatal(err)
	}
	for _, d := range s.Doubts("sound.toml") {
		b.WriteString("doubtful: " + d.String() + "\n")
	}
	compareGolden(t, "testdata/trials/sound.txt", b.String())
	if w := s.Indicators[0].Windows[0]; w != (Window{Name: "200 trials", Step: 1, Trials: 200}) {
		t.Errorf("%+v", w)
	}
}

func TestCompareTrials(t *testing.T) {
	before, err := parseFile(t, "testdata/trials/sound.toml")
	if err != nil {
		t.Fatal(err)
	}
	for _, test := range []struct{ from, to, want string }{
		{`"200 trials"`, `"300 trials"`, "indicator[wound-infection].windows: the last 200 trials -> nothing (next look): it is looked at no longer, and has no say any more in whether an alert still signals\n" +
			"indicator[wound-infection].windows: nothing -> the last 300 trials (filling): it is looked at once what is kept and what comes fill it"},
		{`, "50000 trials"`, "", "indicator[declined].windows: the last 50000 trials -> nothing (next look): it is looked at no longer, and has no say any more in whether an alert still signals"},
	} {
		after := mustParse(t, strings.Replace(string(before.Text), test.from, test.to, 1))
		var lines []string
		for _, c := range Compare(before, after) {
			lines = append(lines, c.String())
		}
		if got := strings.Join(lines, "\n"); got != test.want {
			t.Errorf("%s -> %s:\n got %s\nwant %s", test.from, test.to, got, test.want)
		}
	}
}
