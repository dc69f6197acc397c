package main

import (
	"encoding/csv"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"tailbell/monitor/life"
)

// TestVans holds every look at the deaths of drivers of vans against R, and
// what comes of them against what was published: see testdata/vans/README.md.
func TestVans(t *testing.T) {
	more := []string{"--series", "vans/drivers", "--until", "1985-01-02"}
	d := monitorRealData(t, "vans", more...)
	if a := &d.account; a.Counted != 192 || a.Refused != 0 || a.Looks != 3*23 {
		t.Errorf("192 months, of which 23 are judged by three windows, came to %+v", *a)
	}
	r := fromR(t, "vans")
	want := map[string]map[string]string{}
	for _, row := range r.rows {
		want[row["window"]+" "+row["to"]] = row
	}
	looks := filepath.Join(t.TempDir(), "looks.csv")
	args := append([]string{"replay", "--config", filepath.Join(testdata, "vans", "vans.toml"), "--zone", "UTC", "--looks", looks}, more...)
	says(t, 0, nil, append(args, filepath.Join(testdata, "vans", "vans.csv"))...)
	table, err := csv.NewReader(strings.NewReader(readText(t, looks))).ReadAll()
	if err != nil {
		t.Fatal(err)
	}
	made, first := 0, map[string]string{}
	for _, cells := range table[1:] {
		look := map[string]string{}
		for i, name := range table[0] {
			look[name] = cells[i]
		}
		if look["status"] != "made" {
			continue
		}
		made++
		month := monthBefore(t, look["end"])
		row := want[look["window"]+" "+month]
		for name, theirs := range map[string]string{"events": "events", "exposure": "exposure", "expected": "expected", "lower_p": "p"} {
			if got, want := floatOf(t, look[name]), floatOf(t, row[theirs]); !closeTo(got, want) {
				t.Errorf("%s to %s: %s is %.17g; R says %.17g", look["window"], month, name, got, want)
			}
		}
		if signals := look["lower_signals"] == "true"; signals != (floatOf(t, row["p"]) <= floatOf(t, r.facts["limit"])) {
			t.Errorf("%s to %s: signals %v; R's p is %s", look["window"], month, signals, row["p"])
		} else if signals && first[look["window"]] == "" {
			first[look["window"]] = month
		}
	}
	if made != len(r.rows) {
		t.Errorf("%d looks; R makes %d", made, len(r.rows))
	}
	for _, window := range []string{"6mo", "12mo", "23mo"} {
		if first[window] != r.facts["first "+window] {
			t.Errorf("%s first signals for %s; R says %s", window, first[window], r.facts["first "+window])
		}
	}
	vansAsPublished(t, want["23mo 1984-12"], d.notices)
}

// monthBefore is the month that ends at the time.
func monthBefore(t *testing.T, end string) string {
	t.Helper()
	at, err := time.Parse(time.RFC3339, end)
	if err != nil {
		t.Fatal(err)
	}
	return at.AddDate(0, -1, 0).Format("2006-01")
}

// vansAsPublished holds the fall over all 23 months against the models of
// these counts that were published, which have trend, season and the law in
// them: about 24 % fewer deaths (from memory).
func vansAsPublished(t *testing.T, all map[string]string, notices []life.Notice) {
	t.Helper()
	const published = 1 - 0.24
	ratio, lower, upper := floatOf(t, all["ratio"]), floatOf(t, all["ratio_lower"]), floatOf(t, all["ratio_upper"])
	if lower > published || published > upper || ratio < 0.70 || ratio > 0.76 {
		t.Errorf("the ratio is %.3f, %.3f to %.3f; published is %.2f", ratio, lower, upper, published)
	}
	for i := range notices {
		if r := &notices[i].Record; r.Direction != life.Lower || r.Opening.Ratio == nil || *r.Opening.Ratio >= 1 {
			t.Errorf("an alert of other than fewer deaths: %+v", r.Opening)
		}
	}
}
