package config

import (
	"strings"
	"testing"
)

func archiveOf(t *testing.T, archive, indicator string) *Setup {
	t.Helper()
	return mustParse(t, `name = "quillmere"
[limits]
archive = "`+archive+`"
[[indicator]]
name = "fall"
series = ["quillmere-*/ward-1/fall"]
unit = "bed-days"
every = "1d"
windows = ["28d"]
horizon = "90d"
`+indicator+`
[indicator.baseline]
kind = "known"
rate = 1
`)
}

func TestArchive(t *testing.T) {
	for text, want := range map[string]Every{"all": {}, "30d": {30, Day}, "2w": {2, Week}, "18mo": {18, Month}, "10y": {10, Year}, "250y": {250, Year}} {
		if s := archiveOf(t, text, ""); s.Limits.Archive != want {
			t.Errorf("%s: %+v", text, s.Limits.Archive)
		}
	}
	for text, want := range map[string]string{
		"12h":  "is not in days or more",
		"90":   "not a whole number, 1 or more, of days",
		"0d":   "not a whole number, 1 or more, of days",
		"251y": "more than 250 years",
		"ever": "not a whole number, 1 or more, of days",
	} {
		_, err := Parse([]byte("name = \"x\"\n[limits]\narchive = \""+text+"\"\n"), "x")
		if err == nil || !strings.Contains(err.Error(), "limits.archive: \""+text+"\" is") || !strings.Contains(err.Error(), want) {
			t.Errorf("%s gave %v, want %q", text, err, want)
		}
	}
	var b strings.Builder
	if err := archiveOf(t, "10y", "").Describe(&b); err != nil || !strings.Contains(b.String(), "are archived for 10 years after they began") {
		t.Errorf("%v: %s", err, b.String())
	}
}

func TestArchiveCompared(t *testing.T) {
	for _, c := range [][3]string{
		{"all", "10y", "let go at once and for good"},
		{"10y", "90d", "let go at once and for good"},
		{"90d", "10y", "what was let go stays so"},
		{"10y", "all", "what was let go stays so"},
	} {
		changes := Compare(archiveOf(t, c[0], ""), archiveOf(t, c[1], ""))
		if len(changes) != 1 || changes[0].Key != "limits.archive" || changes[0].Class != NextLook || !strings.Contains(changes[0].Effect, c[2]) {
			t.Errorf("%v: %v", c, changes)
		}
	}
}

func TestDoubtsOfSeries(t *testing.T) {
	for _, c := range []struct{ archive, indicator, want string }{
		{"1y", "", ""},
		{"100d", "", "limits.archive is 100d: when memory lets a slot go"},
		{"1y", `sums = ["{site}/ward-*/fall"]`, `each sum "{site}/ward-*/fall" has one series only, quillmere-*/ward-1/fall`},
		{"1y", `sums = ["*/{ward}/fall"]`, ""},
		{"1y", "retire = \"30d\"\nexpect = \"20d\"", ""},
		{"1y", "retire = \"30d\"\nexpect = \"50d\"", ""}, // its slots are in memory for longer
		{"1y", "retire = \"30d\"\nexpect = \"200d\"", "nobody is told"},
		{"1y", "retire = \"30d\"\nexpect = [{ series = \"quillmere-east/ward-1/fall\", within = \"200d\" }]", ""},
	} {
		var all []string
		for _, d := range archiveOf(t, c.archive, c.indicator).Doubts("x") {
			all = append(all, d.String())
		}
		text := strings.Join(all, "\n")
		if c.want == "" && text != "" || !strings.Contains(text, c.want) {
			t.Errorf("archive %s, %s: %q, want %q", c.archive, c.indicator, text, c.want)
		}
	}
}
