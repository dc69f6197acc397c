package plant

import (
	"context"
	"encoding/json"
	"fmt"
	"strings"
	"testing"

	"tailbell/config"
	"tailbell/exact"
	"tailbell/monitor"
)

// stanza is a set-up of one indicator whose windows never overlap, so that what
// a window finds is one look.
const stanza = `
name = "rehearsed"
folder = "unused"
[time]
mode = "history"
[[indicator]]
name = "fall"
noun = "falls"
series = ["quillmere-*/*/fall"]
unit = "days"
every = "1d"
settle = "0s"
horizon = "1d"
quiet = 1
windows = [{ span = "28d", step = "28d" }]
p_limit = 0.001
`

const (
	byClock  = "events = \"each\"\nexposure = \"clock\"\nclock = { size = 1, per = \"1d\" }\n"
	upwards  = "tails = [\"upper\"]\n"
	bothWays = "tails = [\"upper\", \"lower\"]\n"
	usual    = "[indicator.baseline]\nkind = \"known\"\nrate = 0.1\n"
)

func setupOf(t *testing.T, parts ...string) *config.Setup {
	t.Helper()
	text := stanza + strings.Join(parts, "")
	s, err := config.Parse([]byte(text), "test")
	if err != nil {
		t.Fatal(err)
	}
	return s
}

func plan(setups ...*config.Setup) *Plan {
	return &Plan{
		Setups: setups, Indicator: "fall", Ratios: []float64{3}, Length: 28, Histories: 800, Seed: 1, Level: 0.95, Draws: 300,
	}
}

// aligned begins every excess with a window.
func aligned(r *Rehearsal) *Rehearsal {
	v := r.invented
	cal := monitor.NewCalendar(v.in.Every, v.in.Zone)
	at := v.warm
	for (cal.Slot(v.starts[at])-4)%28 != 0 {
		at++
	}
	v.place = &at
	return r
}

// holds fails unless a chance lies between the bounds that all but one in
// 100,000 simulations would give.
func holds(t *testing.T, what string, s Share, chance float64) {
	t.Helper()
	s.bound(1 - 1e-5)
	t.Logf("%s: %d of %d = %.4f, exact %.4f", what, s.Count, s.Of, s.Share, chance)
	if chance < s.Lower || chance > s.Upper {
		t.Errorf("%s: %d of %d, bounds %.4f to %.4f, and exactly it is %.4f", what, s.Count, s.Of, s.Lower, s.Upper, chance)
	}
}

func report(t *testing.T, r *Rehearsal, err error) *Report {
	t.Helper()
	if err != nil {
		t.Fatal(err)
	}
	out, err := r.Run(context.Background())
	if err != nil {
		t.Fatal(err)
	}
	return out
}

func window(out *Report, setup int, ratio float64) Found {
	for _, f := range out.Found {
		if f.Setup == setup && f.Ratio == ratio && f.Window != "" {
			return f
		}
	}
	return Found{}
}

// law is what the tests need of a count's law.
type law interface {
	CriticalUpper(limit float64) (int64, float64, bool)
	CriticalLower(limit float64) (int64, float64, bool)
	Upper(k int64) float64
	Lower(k int64) float64
}

// TestPower holds rehearsals against the power of package exact: one look, over
// exactly the excess. Seed 1.
func TestPower(t *testing.T) {
	proportion := strings.NewReplacer("unit = \"days\"", "unit = \"procedures\"\nmeasure = \"proportion\"")
	cases := []struct {
		name     string
		rest     string
		exposure uint64
		ratio    float64
		null     law
		truth    law
	}{
		{"Poisson, more", byClock + upwards + usual, 0, 3, exact.Poisson{Rate: 0.1, Exposure: 28}, exact.Poisson{Rate: 0.3, Exposure: 28}},
		{"Poisson, fewer", byClock + bothWays + strings.Replace(usual, "0.1", "0.4", 1), 0, 0.25, exact.Poisson{Rate: 0.4, Exposure: 28}, exact.Poisson{Rate: 0.1, Exposure: 28}},
		{"reported exposure", "events = \"counted\"\n" + upwards + usual, 5, 1.7, exact.Poisson{Rate: 0.1, Exposure: 140}, exact.Poisson{Rate: 0.17, Exposure: 140}},
		{"spread", byClock + upwards + usual + "spread = 2\n", 0, 4, exact.NewNegativeBinomial(0.1, 28, 2), exact.NewNegativeBinomial(0.4, 28, 2)},
		{
			"reference", byClock + upwards + "[indicator.baseline]\nkind = \"reference\"\nevents = 30\nexposure = 300\n", 0, 3,
			exact.TwoRate{RefEvents: 30, Exposure: 28, RefExposure: 300, Margin: 1},
			exact.Poisson{Rate: 0.3, Exposure: 28},
		},
		{
			"proportion", "events = \"counted\"\n" + bothWays + "[indicator.baseline]\nkind = \"known\"\nrate = 0.05\n", 4, 3,
			exact.NewBinomial(112, 0.05), exact.NewBinomial(112, 0.15),
		},
		{
			"proportion, fewer", "events = \"counted\"\n" + bothWays + "[indicator.baseline]\nkind = \"known\"\nrate = 0.2\n", 4, 0.4,
			exact.NewBinomial(112, 0.2), exact.NewBinomial(112, 0.08),
		},
	}
	for _, c := range cases {
		t.Run(c.name, func(t *testing.T) {
			text := stanza
			if strings.HasPrefix(c.name, "proportion") {
				text = proportion.Replace(text)
			}
			setup, err := config.Parse([]byte(text+c.rest), "test")
			if err != nil {
				t.Fatal(err)
			}
			p := plan(setup)
			p.Ratios = []float64{c.ratio}
			r, err := p.Invent(Invention{Years: 0.2, Exposure: config.Decimal{Coef: c.exposure}})
			if err != nil {
				t.Fatal(err)
			}
			f := window(report(t, aligned(r), nil), 0, c.ratio)
			k, size, ok := c.null.CriticalUpper(0.001)
			power := c.truth.Upper
			if c.ratio < 1 {
				k, size, ok = c.null.CriticalLower(0.001)
				power = c.truth.Lower
			}
			if !ok {
				t.Fatal("no count can signal")
			}
			holds(t, "found", f.InTime, power(k))
			if c.name != "reference" { // whose size is conditional
				holds(t, "by chance", f.ByChance, size)
			}
		})
	}
}

// TestFalseAlerts holds the false alerts against the crossing rate: the first
// look costs its size, each later one what crosses. With quiet = 1 an alert
// opens at every crossing, but for those that no event enters. Seed 2.
func TestFalseAlerts(t *testing.T) {
	weekly := strings.Replace(stanza, `step = "28d"`, `step = "7d"`, 1)
	weekly = strings.Replace(weekly, "p_limit = 0.001", "p_limit = 0.02", 1)
	setup, err := config.Parse([]byte(weekly+byClock+upwards+usual), "test")
	if err != nil {
		t.Fatal(err)
	}
	p := plan(setup)
	p.Seed, p.Histories = 2, 400
	r, err := p.Invent(Invention{Years: 3})
	out := report(t, r, err)
	k, size, _ := exact.Poisson{Rate: 0.1, Exposure: 28}.CriticalUpper(0.02)
	cross := exact.CrossingUpper(exact.Poisson{Rate: 0.1, Exposure: 7}, exact.Poisson{Rate: 0.1, Exposure: 21}, exact.Poisson{Rate: 0.1, Exposure: 7}, k, k)
	f := out.False[0]
	looks := f.Years * 365.2425 / 7
	want := (looks-float64(p.Histories))*cross + float64(p.Histories)*size
	lower, upper := exact.Garwood(f.Alerts, 1e-4)
	t.Logf("%d false alerts in %.1f years, %.1f by the crossing rate", f.Alerts, f.Years, want)
	if want < lower || want > upper {
		t.Errorf("%d false alerts (%.1f to %.1f), and the crossing rate gives %.1f", f.Alerts, lower, upper, want)
	}
	if f.Lower > f.Rate || f.Rate > f.Upper || f.Resampled[0] > f.Rate || f.Resampled[1] < f.Rate {
		t.Errorf("bounds do not hold the rate: %+v", f)
	}
}

// TestWorkers holds a rehearsal to its seed, however it is spread over
// processors.
func TestWorkers(t *testing.T) {
	var texts []string
	for _, workers := range []int{1, 3} {
		p := plan(setupOf(t, byClock, bothWays, usual), setupOf(t, "level = 0.9\n", byClock, bothWays, usual))
		p.Ratios, p.Histories, p.Workers, p.Shape, p.Frequencies = []float64{0.2, 4}, 40, workers, Hump, []float64{0.5}
		r, err := p.Invent(Invention{Years: 1})
		text, err := json.Marshal(report(t, r, err))
		if err != nil {
			t.Fatal(err)
		}
		texts = append(texts, string(text))
	}
	if texts[0] != texts[1] {
		t.Errorf("1 worker:\n%s\n3 workers:\n%s", texts[0], texts[1])
	}
}

// TestPaired compares a set-up with itself, and with one that has a stricter
// limit, which can find nothing that the other does not.
func TestPaired(t *testing.T) {
	a := setupOf(t, byClock, upwards, usual)
	strict, err := config.Parse([]byte(strings.Replace(stanza, "p_limit = 0.001", "p_limit = 1e-6", 1)+byClock+upwards+usual), "test")
	if err != nil {
		t.Fatal(err)
	}
	for _, b := range []*config.Setup{a, strict} {
		p := plan(a, b)
		p.Histories, p.Length = 200, 84
		r, err := p.Invent(Invention{Years: 1})
		out := report(t, r, err)
		x := out.Pairs[0]
		t.Logf("%+v", x)
		if x.OnlySecond > 0 || x.Both+x.OnlyFirst+x.Neither != 200 {
			t.Errorf("%+v", x)
		}
		if b == a && (x.OnlyFirst > 0 || x.P != 1 || x.Later.Median != 0) {
			t.Errorf("a set-up differs from itself: %+v", x)
		}
		if b == strict && (x.OnlyFirst == 0 || x.P > 0.01) {
			t.Errorf("the strict set-up misses nothing: %+v", x)
		}
	}
}

// TestReal plants in a history that was itself invented at the usual rate, so
// that the power of package exact holds there too. Seed 3.
func TestReal(t *testing.T) {
	setup := setupOf(t, "events = \"counted\"\n", upwards, usual)
	p := plan(setup)
	p.Seed, p.Ratios, p.Histories = 3, []float64{3}, 1
	var messages []monitor.Message
	r, err := p.Invent(Invention{Years: 12, Exposure: config.Decimal{Coef: 1}})
	if err != nil {
		t.Fatal(err)
	}
	g, err := r.grounds.ground(0)
	if err != nil {
		t.Fatal(err)
	}
	for i, a := range g.base {
		a.o.ID = fmt.Sprintf("day-%d", i)
		messages = append(messages, monitor.Message{Kind: monitor.Observations, Items: []monitor.Item{{Observation: a.o}}, Stored: a.at, Time: a.at, HasTime: true})
	}
	known, err := ReadKnown(strings.NewReader("series,start,end\n**,2005-01-01,2008-01-01\n"), setup.Indicators[0].Zone)
	if err != nil {
		t.Fatal(err)
	}
	p.Histories, p.Length, p.Ratios = 600, 55, []float64{3} // which holds one whole window, or a hair under two
	x, err := p.Observe(messages, known)
	out := report(t, x, err)
	f := window(out, 0, 3)
	k, _, _ := exact.Poisson{Rate: 0.1, Exposure: 28}.CriticalUpper(0.001)
	one := exact.Poisson{Rate: 0.3, Exposure: 28}.Upper(k)
	lower, upper := exact.ClopperPearson(f.InTime.Count, f.InTime.Of, 1e-5)
	t.Logf("found %.3f (%.3f to %.3f); one whole window %.3f, two %.3f", f.InTime.Share, lower, upper, one, 1-(1-one)*(1-one))
	if upper < one || lower > 1-(1-one)*(1-one) {
		t.Errorf("found %.3f (%.3f to %.3f) of what one window finds at %.3f", f.InTime.Share, lower, upper, one)
	}
	for i := range 200 {
		g, err := x.grounds.ground(i)
		if err != nil {
			t.Fatal(err)
		}
		if x.real.labelled(g.series, g.from, g.to) {
			t.Fatalf("history %d: an excess was planted in a known episode", i)
		}
	}
	if !out.False[0].Told || out.False[0].Years < 8 || out.False[0].Years > 9.5 {
		t.Errorf("false alerts over %+v", out.False[0])
	}
	blind, err := p.Observe(messages, nil)
	if err != nil {
		t.Fatal(err)
	}
	p.Histories = 3
	if out := report(t, blind, nil); out.False[0].Told || len(out.Predict) > 0 {
		t.Errorf("false alerts are told of a history without labels: %+v", out.False[0])
	}
}

// TestThin keeps the same events in all revisions, and none more than there
// are.
func TestThin(t *testing.T) {
	const day = monitor.Instant(86_400_000_000)
	g := &ground{series: "a", slots: []slot{{start: 0, end: day}}}
	for rev := range int64(3) {
		g.base = append(g.base, arrival{o: monitor.Observation{Series: "a", ID: "x", Revision: rev, Start: 0, End: day, Events: 1000 + 10*rev, HasEvents: true}})
	}
	g.base = append(g.base, arrival{o: monitor.Observation{Series: "a", Start: day, End: 2 * day, Events: 7, HasEvents: true}})
	p := plan(setupOf(t, byClock, bothWays, usual))
	r, err := p.Invent(Invention{Years: 1})
	if err != nil {
		t.Fatal(err)
	}
	got := g.thin(Step, 0.3, r.plan.source(1))
	if got[3].o.Events != 7 {
		t.Errorf("events outside the excess became %d", got[3].o.Events)
	}
	if a, b, c := got[0].o.Events, got[1].o.Events, got[2].o.Events; b < a || c < b || b > a+10 || a < 230 || a > 370 {
		t.Errorf("revisions hold %d, %d, %d", a, b, c)
	}
	if g.base[0].o.Events != 1000 {
		t.Error("the history itself was changed")
	}
}

func TestPlanErrors(t *testing.T) {
	up := setupOf(t, byClock, upwards, usual)
	counted := setupOf(t, "events = \"counted\"\n", upwards, usual)
	trailing := setupOf(t, byClock, upwards, "[indicator.baseline]\nkind = \"trailing\"\nspan = \"365d\"\n")
	for _, c := range []struct {
		setup *config.Setup
		bend  func(*Plan, *Invention)
		want  string
	}{
		{up, func(p *Plan, _ *Invention) { p.Indicator = "none" }, "no such indicator"},
		{up, func(p *Plan, _ *Invention) { p.Ratios = []float64{0.5} }, "does not watch that tail"},
		{up, func(p *Plan, _ *Invention) { p.Ratios = []float64{1} }, "no ratio"},
		{up, func(_ *Plan, v *Invention) { v.Drawn = true }, "reference"},
		{up, func(_ *Plan, v *Invention) { v.Exposure = config.Decimal{Coef: 3} }, "from the clock"},
		{up, func(_ *Plan, v *Invention) { v.Series = "elsewhere" }, "not monitored"},
		{up, func(_ *Plan, v *Invention) { v.Years = 0 }, "years"},
		{counted, func(*Plan, *Invention) {}, "how many days"},
		{trailing, func(*Plan, *Invention) {}, "true rate"},
	} {
		p, v := plan(c.setup), Invention{Years: 1}
		c.bend(p, &v)
		if _, err := p.Invent(v); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("error %v, not of %q", err, c.want)
		}
	}
}

// TestLearned runs what is learned from the history itself: reporting delays,
// a trailing baseline, peers.
func TestLearned(t *testing.T) {
	for name, c := range map[string]struct {
		rest string
		how  Invention
	}{
		"trailing": {byClock + upwards + "[indicator.baseline]\nkind = \"trailing\"\nspan = \"365d\"\n", Invention{Years: 1, Rate: 0.1}},
		"peers":    {byClock + upwards + "[indicator.baseline]\nkind = \"peers\"\nspan = \"365d\"\n", Invention{Years: 1, Rate: 0.1, Peers: 4}},
		"delay": {
			"events = \"counted\"\n" + upwards + usual + "delay = { ages = [\"0d\", \"5d\", \"20d\"], reported = [0.3, 0.8, 1] }\n",
			Invention{Years: 1, Exposure: config.Decimal{Coef: 1}},
		},
		"drawn": {byClock + upwards + "[indicator.baseline]\nkind = \"reference\"\nevents = 30\nexposure = 300\n", Invention{Years: 1, Drawn: true}},
	} {
		t.Run(name, func(t *testing.T) {
			s, err := config.Parse([]byte(strings.Replace(stanza, `horizon = "1d"`, `horizon = "60d"`, 1)+c.rest), "test")
			if err != nil {
				t.Fatal(err)
			}
			p := plan(s)
			p.Histories, p.Length, p.Ratios = 60, 84, []float64{8}
			r, err := p.Invent(c.how)
			f := report(t, r, err).Found[0]
			if t.Logf("%+v %+v", f, f.Delay); f.InTime.Share < 0.8 {
				t.Errorf("an eightfold rate over 84 days was found %d times of %d", f.InTime.Count, f.InTime.Of)
			}
		})
	}
}
