package words

import (
	"flag"
	"math"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"
	"unicode/utf8"

	"github.com/google/go-cmp/cmp"

	"tailbell/config"
	"tailbell/monitor/life"
)

var update = flag.Bool("update", false, "rewrite the golden files")

func at(t *testing.T, zone, text string) time.Time {
	t.Helper()
	loc, err := config.LoadZone(zone)
	if err != nil {
		t.Fatal(err)
	}
	when, err := time.ParseInLocation("2006-01-02 15:04", text, loc)
	if err != nil {
		t.Fatal(err)
	}
	return when
}

func ptr(x float64) *float64 { return &x }

// ward is a rate against a known baseline: 4 events, mu = 0.0018 * 616, p =
// 1 - exp(-mu) (1 + mu + mu^2/2 + mu^3/6) = 0.026397. The exact bounds of 4
// events, 1.089865 and 10.241589, are those of the R package survival 3.5-3
// (cipoisson), over 616 device-days.
func ward(t *testing.T) life.Record {
	t.Helper()
	const zone = "Europe/Berlin"
	return life.Record{
		ID: "k3v9-1", Indicator: "line-infection", Title: "Line infections", Series: "quillmere-east/ward-3/line-infection",
		Direction: life.Upper, Condition: life.Unacknowledged, Number: 1, Zone: zone, Opened: at(t, zone, "2026-03-04 00:00"),
		Opening: life.Evidence{
			Window: "28d", From: at(t, zone, "2026-02-04 00:00"), To: at(t, zone, "2026-03-04 00:00"), Due: at(t, zone, "2026-03-04 00:00"),
			Events: 4, Exposure: "616", Unit: "device-days", EventNoun: "line infections", Expected: 1.1088, Measure: "rate", Per: 1000,
			Rate: 6.4935, RateLower: 1.7693, RateUpper: 16.6260, RatioKind: "rate ratio", Ratio: ptr(3.6075), RatioLower: 0.98293, RatioUpper: ptr(9.2367),
			Alpha: 0.05, Chosen: true, Test: "exact Poisson", P: 0.026397, Log10P: math.Log10(0.026397), Critical: 4, AttainedSize: 0.026397, Limit: 0.03,
			Baseline:  life.Baseline{Kind: "known", Rate: 1.8, Margin: 1, Version: "2025", Source: "surveillance report 2025"},
			Recompute: "tailbell exact --events 4 --exposure 616 --baseline 1.8 --per 1000 --alpha 0.05 --limit 0.03",
		},
		IDs: []string{"lab-0117", "lab-0131"}, MoreIDs: 2, Caution: Caution,
	}
}

func step(r *life.Record, n int, kind life.StepKind, when time.Time, c life.Condition) life.Notice {
	s := life.Step{Number: n, Kind: kind, At: when, Condition: c}
	r.Condition = c
	r.Steps = append(r.Steps, s)
	return life.Notice{Step: s, Record: *r}
}

func wardLife(t *testing.T) []life.Notice {
	t.Helper()
	r := ward(t)
	zone := r.Zone
	r.Worst = r.Opening
	notices := []life.Notice{step(&r, 1, life.StepOpened, r.Opened, life.Unacknowledged)}

	worse := r.Opening
	worse.From, worse.To, worse.Due = at(t, zone, "2026-02-21 00:00"), at(t, zone, "2026-03-21 00:00"), at(t, zone, "2026-03-21 00:00")
	worse.Events, worse.Exposure, worse.Expected, worse.LateEvents = 7, "603.5", 1.0863, 1
	worse.RateLower, worse.RateUpper, worse.Log10P = 4.663, 23.898, -3.67
	r.Worst = worse
	r.Since = &life.Since{From: r.Opened, To: worse.To, Events: 4, Exposure: "355.5", RateLower: 3.0657, RateUpper: ptr(28.809)}
	n := step(&r, 2, life.StepWorsened, worse.Due, life.Unacknowledged)
	n.Step.Evidence = &worse
	r.Steps[1].Evidence = &worse
	notices = append(notices, n)

	fixed := r.Opening
	fixed.Events, fixed.LateEvents, fixed.RateLower, fixed.RateUpper, fixed.Log10P = 5, 1, 2.6355, 18.942, -2.2
	r.Opening = fixed
	n = step(&r, 3, life.StepCorrected, at(t, zone, "2026-03-22 09:10"), life.Unacknowledged)
	n.Step.Evidence = &fixed
	notices = append(notices, n)

	n = step(&r, 4, life.StepAcknowledged, at(t, zone, "2026-03-23 10:00"), life.Acknowledged)
	n.Step.By = "B. Ostrander"
	notices = append(notices, n)
	n = step(&r, 5, life.StepNote, at(t, zone, "2026-03-24 08:05"), life.Acknowledged)
	n.Step.By, n.Step.Why = "B. Ostrander", "Two of the five share a line set\x1b[2J; sent to the lab."
	notices = append(notices, n)
	r.Steps[3].By, r.Steps[4].By, r.Steps[4].Why = "B. Ostrander", "B. Ostrander", n.Step.Why
	notices = append(notices, step(&r, 6, life.StepReturned, at(t, zone, "2026-05-02 00:00"), life.Returned))
	n = step(&r, 7, life.StepClosed, at(t, zone, "2026-05-02 00:00"), life.Closed)
	n.Step.Why, r.Steps[6].Why = "returned and acknowledged", "returned and acknowledged"
	n.Record = r
	notices = append(notices, n)
	for _, mark := range []life.Mark{life.MarkChance, life.NotMarked, life.MarkReal} {
		r.Mark = mark
		n = step(&r, len(r.Steps)+1, life.StepMarked, at(t, zone, "2026-05-04 09:00"), life.Closed)
		n.Step.By, n.Step.Why, n.Step.Mark = "M. Quell", "reviewed", mark
		r.Steps[len(r.Steps)-1] = n.Step
		n.Record = r
		notices = append(notices, n)
	}
	return notices
}

func lowerProportion(t *testing.T) life.Notice {
	t.Helper()
	const zone = "Europe/Berlin"
	r := life.Record{
		ID: "w2hc-3", Indicator: "wound-infection", Title: "Wound infections", Series: "quillmere-quay/theatre-b/wound-infection",
		Direction: life.Lower, Number: 3, Zone: zone, Opened: at(t, zone, "2025-07-07 00:00"), Late: true,
		Opening: life.Evidence{
			Window: "12w", From: at(t, zone, "2025-04-07 00:00"), To: at(t, zone, "2025-06-30 00:00"), Due: at(t, zone, "2025-07-07 00:00"),
			Events: 0, Exposure: "1211", Unit: "procedures", EventNoun: "wound infections", Expected: 24.22, Measure: "proportion", Per: 1,
			RateLower: 0, RateUpper: 0.003041, RatioKind: "odds ratio", Ratio: ptr(0), RatioUpper: ptr(0.16), Alpha: 0.05, Chosen: true,
			Log10P: -10.62, Critical: 6, AttainedSize: 0.0009, Limit: 0.001,
			Baseline: life.Baseline{Kind: "reference", Rate: 0.02, Events: 1, Exposure: "50", Margin: 1},
		},
	}
	return step(&r, 1, life.StepOpened, at(t, zone, "2025-07-11 14:20"), life.Unacknowledged)
}

// fewFalls is a lower tail with one event and a margin: mu = 10.2 / 1.25, and
// p = exp(-8.16) (1 + 8.16) = 0.002618.
func fewFalls(t *testing.T) life.Notice {
	t.Helper()
	const zone = "Europe/Berlin"
	r := life.Record{
		ID: "few1", Indicator: "fall", Title: "Falls", Series: "quillmere-quay/stroke-unit/fall",
		Direction: life.Lower, Number: 1, Zone: zone, Opened: at(t, zone, "2024-12-06 00:00"),
		Opening: life.Evidence{
			Window: "28d", From: at(t, zone, "2024-11-04 00:00"), To: at(t, zone, "2024-12-02 00:00"), Due: at(t, zone, "2024-12-06 00:00"),
			Events: 1, Exposure: "1700", Unit: "bed-days", EventNoun: "falls", Expected: 10.2, Measure: "rate", Per: 1000,
			RateLower: 0.014893, RateUpper: 3.2774, Alpha: 0.05, Chosen: true, Log10P: math.Log10(0.002618),
			Baseline: life.Baseline{Kind: "known", Rate: 6, Margin: 1.25},
		},
		Caution: "Local words of caution.",
	}
	return step(&r, 1, life.StepOpened, r.Opened, life.Unacknowledged)
}

func requests(t *testing.T) life.Notice {
	t.Helper()
	const zone = "Europe/Berlin"
	r := life.Record{
		ID: "f77a-1", Indicator: "failed-request", Series: "ferrybill/harbour/card-payment/failed-request",
		Direction: life.Upper, Number: 1, Zone: zone, Opened: at(t, zone, "2025-10-26 03:00"),
		Opening: life.Evidence{
			Window: "6h", From: at(t, zone, "2025-10-25 22:00"), To: at(t, zone, "2025-10-26 03:00"), Due: at(t, zone, "2025-10-26 03:00"),
			Events: 12711, Exposure: "2417903", Unit: "requests", EventNoun: "failed requests", Expected: 12089.515, Measure: "rate", Per: 1000,
			RateLower: 5.1660, RateUpper: 5.3493, Alpha: 0.01, Chosen: true, Log10P: -345.2,
			Baseline: life.Baseline{Kind: "known", Rate: 5, Margin: 1.02},
		},
	}
	return step(&r, 1, life.StepOpened, r.Opened, life.Unacknowledged)
}

func withdrawn(t *testing.T) life.Notice {
	t.Helper()
	r := ward(t)
	r.Opening.Events, r.Opening.Exposure = 1, "1"
	n := step(&r, 2, life.StepWithdrawn, at(t, r.Zone, "2026-03-11 08:00"), life.Withdrawn)
	n.Step.Why = "data corrected"
	return n
}

// further is an alert whose evidence does not grow: first a window joins that
// has no evidence in the record yet, then one that the record does not name,
// as the strongest of the looks of that time is of the window that opened it.
// What came since has left memory in part.
func further(t *testing.T) []life.Notice {
	t.Helper()
	const zone = "UTC"
	r := life.Record{
		ID: "coal1", Indicator: "explosion", Series: "coal-mines/explosion", Direction: life.Lower, Number: 1, Zone: zone,
		Opened: at(t, zone, "1900-01-02 00:00"),
		Opening: life.Evidence{
			Window: "10y", From: at(t, zone, "1890-01-01 00:00"), To: at(t, zone, "1900-01-01 00:00"), Due: at(t, zone, "1900-01-02 00:00"),
			Events: 12, Exposure: "3652", Unit: "days", EventNoun: "explosions", Expected: 32.4, Measure: "rate", Per: 365.25,
			RateLower: 0.62, RateUpper: 2.1, Alpha: 0.05, Chosen: true, Log10P: -3.55, Baseline: life.Baseline{Kind: "known", Rate: 3.24, Margin: 1},
		},
	}
	r.Worst = r.Opening
	opened := step(&r, 1, life.StepOpened, r.Opened, life.Unacknowledged)
	join := r.Opening
	join.Window, join.From, join.To, join.Due = "5y", at(t, zone, "1896-01-01 00:00"), at(t, zone, "1901-01-01 00:00"), at(t, zone, "1901-01-02 00:00")
	join.Events, join.Exposure, join.Expected, join.Log10P = 4, "1826", 16.2, -3.1
	first := step(&r, 2, life.StepWorsened, join.Due, life.Unacknowledged)
	first.Step.Evidence, r.Steps[1].Evidence = &join, &join
	again := r.Opening
	again.From, again.To, again.Due = at(t, zone, "1892-01-01 00:00"), at(t, zone, "1902-01-01 00:00"), at(t, zone, "1902-01-02 00:00")
	again.Log10P = -3.5
	r.Since = &life.Since{
		From: at(t, zone, "1901-01-01 00:00"), To: again.To, Events: 2, Exposure: "365", RateLower: 0.24, RateUpper: ptr(7.2),
	}
	second := step(&r, 3, life.StepWorsened, again.Due, life.Unacknowledged)
	second.Step.Evidence = &again
	return []life.Notice{opened, first, second}
}

func golden(t *testing.T, name, got string) {
	t.Helper()
	file := filepath.Join("testdata", name)
	if *update {
		if err := os.WriteFile(file, []byte(got), 0o600); err != nil {
			t.Fatal(err)
		}
	}
	want, err := os.ReadFile(file)
	if err != nil {
		t.Fatal(err)
	}
	if d := cmp.Diff(string(want), got); d != "" {
		t.Errorf("%s (-want +got), rewritten by -update:\n%s", file, d)
	}
}

func TestNotices(t *testing.T) {
	notices := wardLife(t)
	notices = append(notices, lowerProportion(t), fewFalls(t), requests(t), withdrawn(t))
	var b strings.Builder
	for i := range notices {
		b.WriteString(Notice(&notices[i], 100))
	}
	golden(t, "notices.txt", b.String())
}

func TestFurtherWindows(t *testing.T) {
	var b strings.Builder
	for _, n := range further(t) {
		b.WriteString(Notice(&n, 100))
	}
	golden(t, "further.txt", b.String())
}

// TestBases says where estimated rates come from.
func TestBases(t *testing.T) {
	from, to := at(t, "Europe/Berlin", "2025-01-01 00:00"), at(t, "Europe/Berlin", "2026-01-01 00:00")
	var b strings.Builder
	for _, base := range []life.Baseline{
		{Kind: "known", Spread: 1.5, Strata: "weekday", Delay: true},
		{Kind: "reference", Events: 36, Exposure: "20000", Source: "committee"},
		{Kind: "trailing", Events: 30, Exposure: "18250.5", From: &from, To: &to, LeftOut: 1},
		{Kind: "trailing", Events: 30, Exposure: "18250.5", From: &from, To: &to, First: &life.Comparator{
			Events: 20, Exposure: "18000", From: from.AddDate(-2, 0, 0), To: from.AddDate(-1, 0, 0), Ratio: ptr(5.84), RatioLower: 1.44, RatioUpper: ptr(17.6),
		}},
		{Kind: "peers", Events: 301, Exposure: "181000", From: &from, To: &to, Peers: 9, Between: ptr(1.32)},
	} {
		r := ward(t)
		r.Opening.Baseline = base
		if base.Delay {
			r.Opening.Provisional = 7
		}
		b.WriteString(wrap(basis(&r, &r.Opening), 100, "", "") + "\n")
	}
	golden(t, "bases.txt", b.String())
}

func TestHeadingsOffTheMinute(t *testing.T) {
	r := ward(t)
	n := step(&r, 1, life.StepOpened, r.Opened.Add(90*time.Second), life.Unacknowledged)
	if got := Heading(&n); !strings.HasPrefix(got, "Wed 4 Mar 2026 00:01:30 CET  OPENED") {
		t.Error(got)
	}
}

func TestLines(t *testing.T) {
	notices := wardLife(t)
	notices = append(notices, lowerProportion(t), fewFalls(t), requests(t), withdrawn(t))
	var b strings.Builder
	for i := range notices {
		line := Line(&notices[i])
		if strings.ContainsAny(line, "\n\r") {
			t.Errorf("more than a line: %q", line)
		}
		b.WriteString(line + "\n")
	}
	golden(t, "lines.txt", b.String())
}

func TestWholeRecord(t *testing.T) {
	notices := wardLife(t)
	golden(t, "record.txt", Record(&notices[len(notices)-1].Record, 100))
}

func TestCautionStandsOnEveryOpenedAlert(t *testing.T) {
	for _, n := range []life.Notice{wardLife(t)[0], lowerProportion(t), requests(t)} {
		p := Paragraphs(&n)
		if p[len(p)-1] != Caution {
			t.Errorf("%s: no caution in %q", n.Record.ID, p)
		}
	}
}

func TestLinesKeepTheirWidth(t *testing.T) {
	for _, n := range wardLife(t) {
		for _, width := range []int{40, 72, 100, 160} {
			lines := strings.Split(Notice(&n, width), "\n")
			for _, line := range lines[1:] {
				if utf8.RuneCountInString(line) > width {
					t.Errorf("width %d: %q", width, line)
				}
			}
		}
	}
}

func TestNoControlCharacters(t *testing.T) {
	for _, n := range wardLife(t) {
		if strings.ContainsAny(Notice(&n, 80)+Record(&n.Record, 80), "\x1b\x07\r") {
			t.Error("a control character of a note reached the terminal")
		}
	}
}

func TestNumbers(t *testing.T) {
	for _, c := range []struct {
		x    float64
		want string
	}{
		{0, "0"},
		{0.0021, "0.0021"},
		{0.347, "0.35"},
		{0.996, "1.0"},
		{1.1088, "1.1"},
		{16.626, "16.6"},
		{999.94, "999.9"},
		{999.96, "1,000"},
		{12089.5, "12,090"},
		{1234567, "1,234,567"},
		{2.3e-9, "2.3e-9"},
	} {
		if got := number(c.x); got != c.want {
			t.Errorf("number(%v) = %q, want %q", c.x, got, c.want)
		}
	}
	lo, hi := pair(5.0214, 5.1131)
	if lo != "5.021" || hi != "5.113" {
		t.Errorf("close bounds: %s to %s", lo, hi)
	}
}

func TestChances(t *testing.T) {
	for _, c := range []struct {
		log10p  float64
		p, odds string
	}{
		{math.Log10(0.02642), "0.026", "about 1 of 38"},
		{math.Log10(0.25), "0.25", "about 1 of 4"},
		{math.Log10(0.0099999), "0.010", "about 1 of 100"},
		{math.Log10(0.000234), "0.00023", "about 1 of 4,300"},
		{math.Log10(2.3e-9), "2.3e-9", "about 1 of 430 million"},
		{math.Log10(9.96e-6), "1.0e-5", "about 1 of 100,000"},
		{-345.2, "6.3e-346", "less than 1 of a trillion"},
		{0, "1", "nearly all"},
	} {
		if got := pvalue(c.log10p); got != c.p {
			t.Errorf("p of 10^%v = %q, want %q", c.log10p, got, c.p)
		}
		if got := odds(c.log10p); got != c.odds {
			t.Errorf("odds of 10^%v = %q, want %q", c.log10p, got, c.odds)
		}
	}
}

func TestAmounts(t *testing.T) {
	for n, want := range map[int64]string{0: "0 rows", 1: "1 row", 2: "2 rows", 1204: "1,204 rows"} {
		if got := Amount(n, "rows"); got != want {
			t.Errorf("%d: %q, want %q", n, got, want)
		}
	}
}

func TestSingular(t *testing.T) {
	for noun, want := range map[string]string{
		"line infections": "line infection", "falls": "fall", "needle injuries": "needle injury", "hours worked": "hour worked",
		"losses": "loss", "explosions of gas": "explosion of gas", "sepsis": "sepsis", "requests": "request",
		"device-days": "device-day",
	} {
		if got := singular(noun); got != want {
			t.Errorf("singular(%q) = %q, want %q", noun, got, want)
		}
	}
}

func TestPlaces(t *testing.T) {
	for series, want := range map[string]string{
		"quillmere-east/ward-3/line-infection": "Ward 3, Quillmere East",
		"quillmere-east/ICU_2/line-infections": "ICU 2, Quillmere East",
		"line-infection":                       "Line Infection",
		"a/b":                                  "B, A",
		"größe/über-1":                         "Über 1, Größe",
	} {
		r := life.Record{Series: series, Indicator: "lines", Opening: life.Evidence{EventNoun: "line infections"}}
		if got := place(&r); got != want {
			t.Errorf("place(%q) = %q, want %q", series, got, want)
		}
	}
}
