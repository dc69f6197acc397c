package config

import (
	"os"
	"regexp"
	"slices"
	"strings"
	"testing"
)

func readme(t *testing.T) string {
	t.Helper()
	text, err := os.ReadFile("README.md")
	if err != nil {
		t.Fatal(err)
	}
	return string(text)
}

// TestReadmeKeys checks that the documentation's tables have exactly the keys
// that are read.
func TestReadmeKeys(t *testing.T) {
	tables := map[string]string{
		"At the top": "", "`[time]`": "[time]", "`[bus]`": "[bus]", "`[limits]`": "[limits]", "`[page]`": pagePlace,
		"`[[indicator]]`": indicatorPlace, "`[[indicator.baseline]]`": "[[indicator.baseline]]", "`[[outlet]]`": outletPlace,
	}
	elsewhere := []string{"time", "bus", "limits", "page", "indicator", "baseline", "outlet"} // tables of their own
	row := regexp.MustCompile("(?m)^\\| (`[^|]*`) \\|")
	for part := range strings.SplitSeq(readme(t), "\n## ") {
		heading, body, _ := strings.Cut(part, "\n")
		place, known := tables[heading]
		if !known {
			continue
		}
		delete(tables, heading)
		body, _, _ = strings.Cut(body, "The times by slot")
		var keys []string
		for _, m := range row.FindAllStringSubmatch(body, -1) {
			for k := range strings.SplitSeq(m[1], ", ") {
				if k = strings.Trim(k, "`"); k != "every" || place == indicatorPlace {
					keys = append(keys, k)
				}
			}
		}
		want := slices.DeleteFunc(slices.Clone(keysOf[place]), func(k string) bool { return slices.Contains(elsewhere, k) })
		slices.Sort(keys)
		slices.Sort(want)
		if !slices.Equal(keys, want) {
			t.Errorf("%s documents %v, but %v are read", heading, keys, want)
		}
	}
	for heading := range tables {
		t.Errorf("no heading %s", heading)
	}
}

// TestReadmeExample checks that the documentation's example validates.
func TestReadmeExample(t *testing.T) {
	_, rest, found := strings.Cut(readme(t), "    name = \"quillmere\"\n")
	text, _, end := strings.Cut(rest, "\n## ")
	if !found || !end {
		t.Fatal("no example")
	}
	mustParse(t, "name = \"quillmere\"\n"+strings.ReplaceAll(text, "\n    ", "\n"))
}

// TestReadmeTimes compares the documentation's times by slot with the
// defaults.
func TestReadmeTimes(t *testing.T) {
	for every, cells := range map[Every]string{
		{15, Minute}: "| minutes, `1h` |", {1, Hour}: "| minutes, `1h` |", {1, Day}: "| `1d` |", {1, Week}: "| `1w` |",
		{1, Month}: "| `1mo`, `3mo` |", {3, Month}: "| `1mo`, `3mo` |", {1, Year}: "| `1y` |",
	} {
		settle, horizon, ahead := usualTimes(every)
		want := cells + " " + FormatDuration(settle) + " | " + FormatDuration(horizon) + " | " + FormatDuration(ahead) + " |"
		if !strings.Contains(readme(t), want) {
			t.Errorf("not documented: %s", want)
		}
	}
	if !strings.Contains(readme(t), "("+ZoneDataVersion+")") {
		t.Error("the version of the zone data is not documented")
	}
}
