package main

import (
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"tailbell/monitor/life"
)

// untilNightingale lets the clock reach the look at March 1856.
var untilNightingale = []string{"--until", "1856-04-02"}

// TestNightingale holds the monitor against R over the deaths in the army in
// the East: see testdata/nightingale/README.md.
func TestNightingale(t *testing.T) {
	d := monitorRealData(t, "nightingale", untilNightingale...)
	if a := &d.account; a.Counted != 72 || a.Refused != 0 || a.Looks != 3*15 || a.WithheldLooks != 3*9 {
		t.Errorf("24 months of three causes, of which 15 are judged, came to %+v", *a)
	}
	r := fromR(t, "nightingale")
	t.Run("rates", func(t *testing.T) { nightingaleRates(t, r) })
	t.Run("spread", func(t *testing.T) { nightingaleWithSpread(t, r) })
	rows := map[string]map[string]string{}
	want := map[string][]string{}
	for _, row := range r.rows {
		rows[row["series"]+" "+row["month"]] = row
		for _, tail := range []string{"upper", "lower"} {
			if row["month"] >= "1855-01" && floatOf(t, row[tail]) <= floatOf(t, r.facts["limit"]) {
				want[row["series"]+" "+tail] = append(want[row["series"]+" "+tail], row["month"])
			}
		}
	}
	if diff := cmp.Diff(want, signallingMonths(d.notices)); diff != "" {
		t.Errorf("months that signal (-R +monitor):\n%s", diff)
	}
	compared := 0
	for i := range d.notices {
		n := &d.notices[i]
		for _, e := range []*life.Evidence{&n.Record.Opening, &n.Record.Worst, n.Step.Evidence} {
			if e != nil {
				compared++
				sameTailAsR(t, e, n.Record.Direction, rows[n.Record.Series+" "+e.From.Format("2006-01")])
			}
		}
	}
	t.Logf("%d pieces of evidence compared", compared)
	for _, series := range []string{"army/disease", "army/wounds", "army/other"} {
		for direction, fact := range map[life.Direction]string{life.Upper: "first above ", life.Lower: "first below "} {
			if got, want := firstMonth(d.notices, series, direction), r.facts[fact+series]; got != want {
				t.Errorf("%s: the first %s signal is for %s; R says %s", series, direction, got, want)
			}
		}
	}
	if got := firstMonth(d.notices, "army/disease", life.Lower); got != "1855-04" {
		t.Errorf("the fall is first signalled for %s", got)
	}
	fall := slices.IndexFunc(d.notices, func(n life.Notice) bool {
		return n.Record.Series == "army/disease" && n.Record.Direction == life.Lower
	})
	paragraphs := strings.Split(d.printed, "\n\n")
	asPrinted(t, filepath.Join(testdata, "nightingale", "alert.txt"), paragraphs[fall]+"\n")
}

// nightingaleRates holds R's rates, and the winter's one of the monitor,
// against those printed by Nightingale for January 1855 (from memory). They
// are a month's deaths times twelve, whatever its days.
func nightingaleRates(t *testing.T, r *rOutput) {
	t.Helper()
	printed := map[string]float64{"army/disease": 1022.8, "army/wounds": 30.7, "army/other": 120.0}
	for _, row := range r.rows {
		if row["month"] != "1855-01" {
			continue
		}
		if got := floatOf(t, row["rate"]); got < printed[row["series"]]-0.05 || got > printed[row["series"]]+0.05 {
			t.Errorf("%s: %.2f per 1,000 a year in January 1855; printed is %.1f", row["series"], got, printed[row["series"]])
		}
		delete(printed, row["series"])
	}
	if len(printed) > 0 {
		t.Errorf("not found: %v", printed)
	}
	for _, n := range replayNightingale(t, "", "") {
		if e := &n.Record.Opening; n.Record.Series == "army/disease" && n.Record.Direction == life.Upper {
			if e.Rate < 1022.75 || e.Rate > 1022.85 {
				t.Errorf("the monitor has %.2f for the month to %s", e.Rate, e.To)
			}
			return
		}
	}
	t.Error("the winter is not signalled")
}

// nightingaleWithSpread asks when the fall is signalled if the deaths clump as
// they did in the six months of the reference.
func nightingaleWithSpread(t *testing.T, r *rOutput) {
	t.Helper()
	notices := replayNightingale(t, `source = "July to December 1854"`+"\n\n"+`[[indicator]]`+"\n"+`name = "wounds"`,
		`spread = `+r.facts["spread army/disease"]+"\n\n"+`[[indicator]]`+"\n"+`name = "wounds"`)
	month := firstMonth(notices, "army/disease", life.Lower)
	if want := r.facts["first below with spread army/disease"]; month != want || month != "1855-10" {
		t.Errorf("the fall is first signalled for %s; R says %s", month, want)
	}
	for i := range notices {
		n := &notices[i]
		if n.Record.Series != "army/disease" {
			continue
		}
		for _, row := range r.rows {
			if e := &n.Record.Opening; row["series"] == n.Record.Series && row["month"] == e.From.Format("2006-01") && !closeTo(e.P, floatOf(t, row["clumped"])) {
				t.Errorf("%s: p = %.17g; R says %s", row["month"], e.P, row["clumped"])
			}
		}
		if n.Record.Direction == life.Upper {
			t.Errorf("with that spread the winter is signalled too: %s", n.Record.Opening.To)
		}
	}
}

// replayNightingale replays the deaths under the set-up with one text in the
// place of another.
func replayNightingale(t *testing.T, old, replacement string) []life.Notice {
	t.Helper()
	text, err := os.ReadFile(filepath.Join(testdata, "nightingale", "nightingale.toml"))
	if err != nil {
		t.Fatal(err)
	}
	setup := strings.Replace(string(text), old, replacement, 1)
	if setup == string(text) && old != "" {
		t.Fatalf("the set-up has no %q", old)
	}
	args := append([]string{"replay", "--json", "--config", writeSetup(t, setup), "--zone", "UTC"}, untilNightingale...)
	code, replayed, stderr := run(t, append(args, filepath.Join(testdata, "nightingale", "nightingale.csv"))...)
	if code != 0 {
		t.Fatalf("exit code %d\n%s", code, stderr)
	}
	return parseNotices(t, replayed)
}

// firstMonth returns the month of the look that opened the first alert of the
// series in the direction.
func firstMonth(notices []life.Notice, series string, direction life.Direction) string {
	for i := range notices {
		if r := &notices[i].Record; r.Series == series && r.Direction == direction {
			return r.Opening.From.Format("2006-01")
		}
	}
	return "none"
}

// signallingMonths returns, by series and direction, the months in which an
// alert signalled. With quiet = 1 these are exactly the looks that signal.
func signallingMonths(notices []life.Notice) map[string][]string {
	end := map[string]time.Time{}
	records := map[string]*life.Record{}
	for i := range notices {
		n := &notices[i]
		if _, ok := records[n.Record.ID]; !ok {
			end[n.Record.ID] = time.Date(1856, 4, 1, 0, 0, 0, 0, time.UTC)
		}
		if records[n.Record.ID] = &n.Record; n.Step.Kind == life.StepReturned {
			end[n.Record.ID] = n.Step.At.AddDate(0, -1, -1) // it returned by the next month's look
		}
	}
	lit := map[string][]string{}
	for id, r := range records {
		for to := r.Opening.To; !to.After(end[id]); to = to.AddDate(0, 1, 0) {
			key := r.Series + " " + string(r.Direction)
			lit[key] = append(lit[key], to.AddDate(0, -1, 0).Format("2006-01"))
		}
	}
	for _, months := range lit {
		slices.Sort(months)
	}
	return lit
}

// sameTailAsR holds the numbers of one look against R's.
func sameTailAsR(t *testing.T, e *life.Evidence, direction life.Direction, row map[string]string) {
	t.Helper()
	tail := string(direction)
	for _, c := range []struct {
		name string
		got  float64
	}{
		{"events", float64(e.Events)},
		{"exposure", floatOf(t, e.Exposure)},
		{"expected", e.Expected},
		{tail, e.P},
		{"log10_" + tail, e.Log10P},
		{"critical_" + tail, float64(e.Critical)},
		{"size_" + tail, e.AttainedSize},
		{"rate", e.Rate},
		{"rate_lower", e.RateLower},
		{"rate_upper", e.RateUpper},
		{"ratio", *e.Ratio},
		{"ratio_lower", e.RatioLower},
		{"ratio_upper", *e.RatioUpper},
	} {
		if want := floatOf(t, row[c.name]); !closeTo(c.got, want) {
			t.Errorf("%s, %s tail: %s is %.17g; R says %.17g", e.To.Format(time.DateOnly), tail, c.name, c.got, want)
		}
	}
}
