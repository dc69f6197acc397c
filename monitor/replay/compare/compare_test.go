package compare

import (
	"fmt"
	"math"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/life"
	"tailbell/monitor/rehearse/plant"
	"tailbell/monitor/replay"
)

const setupText = `
name = "quillmere"
folder = "x"
[limits]
max_series = 10
max_ids = 10
[[indicator]]
name = "falls"
series = ["*/falls"]
unit = "bed-days"
every = "1d"
zone = "UTC"
events = "counted"
exposure = "reported"
windows = ["7d"]
p_limit = 0.02
quiet = 2
[indicator.baseline]
kind = "known"
rate = 0.02
`

func day(n int) time.Time { return time.Date(2024, 1, n, 0, 0, 0, 0, time.UTC) }

// played makes up a replay over days 8 to 373 with alerts from their window's
// beginning to their end; a week's window opened each.
type alerts []struct {
	series           string
	opened, returned int
}

func (list alerts) played(t *testing.T, name string) Played {
	t.Helper()
	setup, err := config.Parse([]byte(setupText), "set-up")
	if err != nil {
		t.Fatal(err)
	}
	r := &replay.Result{
		Clock: monitor.InstantOf(day(373)),
		Watched: []monitor.Watched{
			{Series: "a/falls", Indicator: "falls", Window: "7d", Looks: 366, First: monitor.InstantOf(day(8)), Last: monitor.InstantOf(day(373))},
			{Series: "b/falls", Indicator: "falls", Window: "7d", Looks: 365, First: monitor.InstantOf(day(9)), Last: monitor.InstantOf(day(373))},
		},
	}
	for i, a := range list {
		record := life.Record{
			ID: fmt.Sprintf("%s-%d", name, i), Indicator: "falls", Series: a.series, Direction: life.Upper,
			Opened: day(a.opened), Opening: life.Evidence{From: day(a.opened - 7), To: day(a.opened), Window: "7d", P: 0.001}, Condition: life.Unacknowledged,
		}
		r.Steps = append(r.Steps, life.Notice{Step: life.Step{Kind: life.StepOpened, At: day(a.opened)}, Record: record})
		switch {
		case a.returned > 0:
			record.Condition = life.Returned
			r.Steps = append(r.Steps, life.Notice{Step: life.Step{Kind: life.StepReturned, At: day(a.returned)}, Record: record})
		case a.returned < 0:
			record.Condition = life.Withdrawn
			r.Steps = append(r.Steps, life.Notice{Step: life.Step{Kind: life.StepWithdrawn, At: day(-a.returned)}, Record: record})
		}
	}
	return Played{Name: name, Setup: setup, Result: r}
}

// found writes a comparison's spans as "series from-to: days of the openings".
func found(c *Comparison) []string {
	var list []string
	n := func(t time.Time) int { return int(t.Sub(day(0)).Hours() / 24) }
	for _, s := range c.Spans {
		text := fmt.Sprintf("%s %d-%d:", s.Series, n(s.From), n(s.To))
		for _, f := range s.Found {
			if f == nil {
				text += " -"
			} else {
				text += fmt.Sprintf(" %dx%d", n(f.Opened), f.Alerts)
			}
		}
		list = append(list, text)
	}
	return list
}

func TestOf(t *testing.T) {
	a := alerts{
		{"a/falls", 20, 25}, {"a/falls", 27, 30}, // two that the other has as one
		{"a/falls", 100, 105},  // alone
		{"b/falls", 20, 25},    // another series
		{"b/falls", 60, 65},    // the other rings once this has ended, over the same events
		{"b/falls", 200, 0},    // still stands
		{"b/falls", 300, -310}, // withdrawn
		{"a/falls", 150, 155},  // beside one of the other that rang long before
	}.played(t, "first")
	b := alerts{
		{"a/falls", 23, 28}, {"b/falls", 70, 75}, {"b/falls", 350, 360}, {"a/falls", 140, 142},
	}.played(t, "other")
	pattern := config.NewPattern("*/falls")
	c := Of([]Played{a, b}, []plant.Episode{
		{Series: pattern, Direction: life.Upper, From: day(17), To: day(24), Note: "known"},
		{Series: config.NewPattern("b/falls"), Direction: life.Upper, From: day(240), To: day(250)},
		{Series: config.NewPattern("a/falls"), Direction: life.Upper, From: day(99), To: day(101)},
	}, 0.95)
	if diff := cmp.Diff([]string{
		"a/falls 13-30: 20x2 23x1",
		"b/falls 13-25: 20x1 -",
		"b/falls 53-75: 60x1 70x1",
		"a/falls 93-105: 100x1 -",
		"a/falls 133-142: - 140x1",
		"a/falls 143-155: 150x1 -",
		"b/falls 193-373: 200x1 350x1",
	}, found(c)); diff != "" {
		t.Error(diff)
	}
	p := c.Pairs[0]
	if p.Both != 3 || p.OnlyFirst != 3 || p.OnlyOther != 1 || p.Earlier != 0 || p.Later != 3 || *p.DelayMedian != 10 || *p.DelayLeast != 3 || *p.DelayMost != 150 {
		t.Errorf("%+v", p)
	}
	// Two-sided exact chances of a coin: 3 of 4 or more uneven, and 3 of 3.
	if p.AloneP != 0.625 || p.DelayP != 0.25 {
		t.Errorf("p = %v, %v", p.AloneP, p.DelayP)
	}
	if *p.NeitherEpisodes != 1 || *c.Sides[0].Episodes != 2 || *c.Sides[1].Episodes != 1 || *c.Sides[0].Unexplained != 3 || *c.Sides[1].Unexplained != 3 {
		t.Errorf("episodes: %d neither, %d and %d found, %d and %d in none", *p.NeitherEpisodes, *c.Sides[0].Episodes, *c.Sides[1].Episodes, *c.Sides[0].Unexplained, *c.Sides[1].Unexplained)
	}
	if f := c.Episodes[0].Found; *f[0].Days != 3 || f[0].Alerts != 3 || *f[1].Days != 6 {
		t.Errorf("%+v, %+v", f[0], f[1])
	}
	checkRates(t, c)
}

// checkRates holds alerts a year against values of R 4.3: poisson.test(8, T),
// poisson.test(4, T), and poisson.test(c(4, 8)), whose bounds of the ratio are
// those of binom.test(4, 12).
func checkRates(t *testing.T, c *Comparison) {
	t.Helper()
	years := 366 / 365.2425
	first, other, p := c.Sides[0].Total, c.Sides[1].Total, c.Pairs[0]
	for _, x := range []struct {
		name      string
		got, want float64
	}{
		{"years", first.Years, years},
		{"series-years", first.SeriesYears, (366 + 365) / 365.2425},
		{"rate", *first.AYear.Rate, 8 / years},
		{"lower", *first.AYear.Lower, 3.4538322 / years},
		{"upper", *first.AYear.Upper, 15.763189 / years},
		{"other's lower", *other.AYear.Lower, 1.0898653 / years},
		{"other's upper", *other.AYear.Upper, 10.241589 / years},
		{"ratio", *p.Ratio, 0.5},
		{"ratio's lower", *p.RatioLower, 0.0992461 / (1 - 0.0992461)},
		{"ratio's upper", *p.RatioUpper, 0.6511245 / (1 - 0.6511245)},
		{"looks a year", *c.Sides[0].LooksAYear, 731 / years},
	} {
		if math.Abs(x.got/x.want-1) > 1e-6 {
			t.Errorf("%s is %.8g, want %.8g", x.name, x.got, x.want)
		}
	}
}

func TestOfNothing(t *testing.T) {
	c := Of([]Played{alerts{}.played(t, "first"), alerts{}.played(t, "other")}, nil, 0.95)
	if p := c.Pairs[0]; p.Both != 0 || p.Ratio != nil || p.DelayMedian != nil || p.AloneP != 1 || p.NeitherEpisodes != nil || len(c.Spans) != 0 {
		t.Errorf("%+v", p)
	}
}

// TestOfLate has an alert whose look was due on day 20 opened on day 68, by
// data that came late. Nobody could know of it before: delays and days count
// from then, in the zone of the indicator.
func TestOfLate(t *testing.T) {
	late, other := alerts{{"a/falls", 20, 80}}.played(t, "late"), alerts{{"a/falls", 30, 40}}.played(t, "other")
	zone := time.FixedZone("Quillmere", 3600)
	late.Setup.Indicators[0].Zone = zone
	for i := range late.Result.Steps {
		n := &late.Result.Steps[i]
		n.Record.Late, n.Record.Steps = true, []life.Step{{Kind: life.StepOpened, At: day(68)}}
	}
	known := []plant.Episode{{Series: config.NewPattern("a/falls"), Direction: life.Upper, From: day(10), To: day(30)}}
	c := Of([]Played{late, other}, known, 0.95)
	p := c.Pairs[0]
	if p.Both != 1 || p.Earlier != 1 || *p.DelayMedian != -38 {
		t.Errorf("the other opened 38 days before the late one: %+v, median %v", p, *p.DelayMedian)
	}
	s, k := c.Spans[0], c.Episodes[0]
	for _, f := range []*Found{s.Found[0], k.Found[0]} {
		if !f.Late || !f.Opened.Equal(day(68)) || !f.Due.Equal(day(20)) || f.Opened.Location() != zone {
			t.Errorf("%+v", f)
		}
	}
	if *k.Found[0].Days != 58 || *k.Found[1].Days != 20 {
		t.Errorf("found after %v and %v days", *k.Found[0].Days, *k.Found[1].Days)
	}
	if s.Zone != "Quillmere" || s.From.Location() != zone || s.To.Location() != zone {
		t.Errorf("%+v", s)
	}
}

// TestOfFirst has a late alert whose look was due first open last: the span
// was found when the other one opened.
func TestOfFirst(t *testing.T) {
	p := alerts{{"a/falls", 20, 30}, {"a/falls", 40, 50}}.played(t, "late")
	for i := range 2 {
		p.Result.Steps[i].Record.Late, p.Result.Steps[i].Record.Steps = true, []life.Step{{Kind: life.StepOpened, At: day(60)}}
	}
	known := []plant.Episode{{Series: config.NewPattern("a/falls"), Direction: life.Upper, From: day(10), To: day(40)}}
	if f := Of([]Played{p}, known, 0.95).Episodes[0].Found[0]; f.Alert != "late-1" || f.Alerts != 2 || *f.Days != 30 {
		t.Errorf("%+v", f)
	}
}
