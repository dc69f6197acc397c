package report_test

import (
	"bytes"
	"context"
	"encoding/json"
	"flag"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"slices"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"tailbell/alert/report"
	"tailbell/config"
	"tailbell/ingest/history"
	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/life"
	"tailbell/monitor/rehearse/plant"
	"tailbell/monitor/rehearse/quillmere"
)

var update = flag.Bool("update", false, "write the golden files anew")

// coal is the report on the coal data.
func coal(t *testing.T) *report.Report {
	t.Helper()
	setup, err := config.Load("../../testdata/coal/coal.toml")
	if err != nil {
		t.Fatal(err)
	}
	h, err := history.Read(context.Background(), []string{"../../testdata/coal/coal.csv"}, history.Options{Zone: time.UTC})
	if err != nil {
		t.Fatal(err)
	}
	e := newEngine(setup)
	rec := report.NewRecorder(setup)
	for m := range h.Messages(1) {
		rec.Play(e, m)
		take(t, rec, e)
	}
	r, err := rec.Report(context.Background(), e, report.Options{Seed: 1, Draws: 200, Pictures: 10})
	if err != nil {
		t.Fatal(err)
	}
	r.Title, r.Program, r.Data, r.Files, r.Rows = "Coal-mining explosions", "0, a test", strings.Repeat("0", 64), []string{"coal.csv"}, h.Counts.Rows
	return r
}

func newEngine(setup *config.Setup) *monitor.Engine {
	e := monitor.New(monitor.Partition{Of: 1, KeyParts: setup.KeyParts})
	e.Apply(&monitor.Message{Position: 1, Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
	return e
}

func take(t *testing.T, rec *report.Recorder, e *monitor.Engine) {
	t.Helper()
	changes := e.Drain()
	if err := rec.Take(&changes); err != nil {
		t.Fatal(err)
	}
}

func written(t *testing.T, write func(io.Writer) error) string {
	t.Helper()
	var b bytes.Buffer
	if err := write(&b); err != nil {
		t.Fatal(err)
	}
	return b.String()
}

// TestCoal makes the report on the coal data twice, and holds it against the
// golden files.
func TestCoal(t *testing.T) {
	first, second := coal(t), coal(t)
	for name, forms := range map[string][2]string{
		"coal.html": {written(t, first.HTML), written(t, second.HTML)},
		"coal.md":   {written(t, first.Markdown), written(t, second.Markdown)},
	} {
		if forms[0] != forms[1] {
			t.Errorf("%s: made twice, it is not the same", name)
		}
		path := filepath.Join("testdata", name)
		if *update {
			if err := os.WriteFile(path, []byte(forms[0]), 0o600); err != nil {
				t.Fatal(err)
			}
		}
		want, err := os.ReadFile(path)
		if err != nil {
			t.Fatal(err)
		}
		if diff := cmp.Diff(string(want), forms[0]); diff != "" {
			t.Errorf("%s is another one (go test ./alert/report -update): %s", name, diff[:min(len(diff), 3000)])
		}
	}
	standsAlone(t, written(t, first.HTML))
	// Four alerts, 209 looks and the first one's p: testdata/coal/README.md.
	in := first.Indicators[0]
	if len(in.Alerts) != 4 || in.Looks != 209 || in.Withheld != 0 {
		t.Errorf("%d alerts in %d looks, %d withheld", len(in.Alerts), in.Looks, in.Withheld)
	}
	if n := len(in.Series[0].Pictures[0].Points) + len(in.Series[0].Pictures[1].Points); n != 209 {
		t.Errorf("the pictures show %d looks", n)
	}
}

// standsAlone fails if the page asks for anything from outside, or runs
// anything.
func standsAlone(t *testing.T, page string) {
	t.Helper()
	inside := strings.ReplaceAll(page, `xmlns="http://www.w3.org/2000/svg"`, "")
	for _, bad := range []string{"http://", "https://", "//www", "src=", "<link", "<script", "@import", "url(", "javascript:", "<iframe", "<object", "<embed", " onload", " onerror", "<img"} {
		if at := strings.Index(strings.ToLower(inside), bad); at >= 0 {
			t.Errorf("the page holds %q: %q", bad, inside[max(0, at-60):min(len(inside), at+60)])
		}
	}
}

const rude = `<script>alert(1)</script><img src=x onerror=y> [a](http://evil.example) **b** | c`

// TestRude puts markup into everything that comes from outside.
func TestRude(t *testing.T) {
	r := coal(t)
	r.Title, r.Files, r.Remake = rude, []string{rude}, rude
	r.Conditions = []report.Condition{{Series: "a", Text: rude, Since: "2026-01-01"}}
	setup := *r.Setup
	setup.Text = []byte("# </pre>" + rude + "\n```\n" + rude)
	r.Setup = &setup
	in := r.Indicators[0]
	cfg := *in.Cfg
	cfg.Title, cfg.EventNoun, cfg.Unit = rude, rude, rude
	in.Cfg = &cfg
	in.How = append(in.How, rude)
	in.Baselines[0].Source = rude
	in.Estimate.Advice = append(in.Estimate.Advice, rude)
	in.Series[0].Name = rude
	for _, p := range in.Series[0].Pictures {
		p.Title, p.Events, p.Note = rude, rude, rude
	}
	a := &in.Alerts[0]
	a.Opening.EventNoun, a.Opening.Unit, a.Opening.Recompute, a.Opening.Baseline.Source, a.Series = rude, rude, rude, rude, rude
	a.Steps = append(a.Steps, life.Step{Kind: life.StepNote, By: rude, Why: rude + "\n# c\n- d"})
	r.Rehearsals = []*plant.Report{{
		Indicator: rude, Title: rude, How: rude, Caution: rude, Setups: []plant.SetupName{{Name: rude, Limit: rude, Digest: "short"}},
		Against: []plant.Record{{Undecided: 1, Episodes: []plant.EpisodeFound{{Series: rude, Note: rude}}}},
	}}
	page := written(t, r.HTML)
	for _, bad := range []string{"<script", "<img", "</pre>&"} {
		if strings.Contains(page, bad) {
			t.Errorf("the page holds %q", bad)
		}
	}
	text := written(t, r.Markdown)
	for _, line := range strings.Split(text, "\n") {
		if strings.HasPrefix(line, "    ") { // a block of code
			continue
		}
		for _, bad := range []string{" <script", "><img", " [a](", "p://e", " **b", "\r"} {
			if strings.Contains(line, bad) {
				t.Errorf("Markdown holds %q: %q", bad, line[:min(len(line), 200)])
			}
		}
	}
	for _, bad := range []string{"\n# c", "\n- d", "\n```"} {
		if strings.Contains(text, bad) {
			t.Errorf("Markdown holds a line %q", bad)
		}
	}
}

// TestLate plays the demo's first months, with all that comes late, is
// corrected and taken back: ticks between the messages must change no alert,
// and every look must be taken once.
func TestLate(t *testing.T) {
	s, err := quillmere.Generate(1)
	if err != nil {
		t.Fatal(err)
	}
	setup, err := config.Parse(s.Setup, "setup.toml")
	if err != nil {
		t.Fatal(err)
	}
	setup.Indicators = slices.DeleteFunc(setup.Indicators, func(in config.Indicator) bool { return in.Name == "failed-request" })
	plain, played := newEngine(setup), newEngine(setup)
	rec := report.NewRecorder(setup)
	d := wire.NewDecoder(wire.Limits{})
	want, got := map[string]life.Record{}, map[string]life.Record{}
	keep := func(to map[string]life.Record, c monitor.Changes) monitor.Changes {
		for _, a := range c.Alerts {
			to[a.ID] = a
		}
		return c
	}
	for i := range s.Messages[:2500] {
		m := d.Decode(wire.Raw{Position: uint64(i + 2), Subject: "quillmere.in.0." + string(s.Messages[i].Kind), Data: s.Messages[i].Data})
		m.Time, m.HasTime, m.Items = monitor.InstantOf(s.Messages[i].Time), true, slices.Clone(m.Items)
		plain.Apply(&m)
		keep(want, plain.Drain())
		rec.Play(played, m)
		c := keep(got, played.Drain())
		if err := rec.Take(&c); err != nil {
			t.Fatal(err)
		}
	}
	if a, b := marshal(t, want), marshal(t, got); a != b {
		t.Errorf("ticks change the alerts: %s", cmp.Diff(a, b))
	}
	r, err := rec.Report(context.Background(), played, report.Options{Pictures: 3})
	if err != nil {
		t.Fatal(err)
	}
	looks, alerts := int64(0), 0
	for _, in := range r.Indicators {
		looks += in.Looks + in.Withheld
		alerts += len(in.Alerts)
		if in.Funnel == nil || in.LeftOut != max(0, len(in.Series)-3) {
			t.Errorf("%s: %d series without pictures", in.Cfg.Name, in.LeftOut)
		}
	}
	if a := played.Account(); looks != a.Looks+a.WithheldLooks {
		t.Errorf("%d looks were taken, and %d fell due", looks, a.Looks+a.WithheldLooks)
	}
	if alerts != len(want) || alerts < 10 {
		t.Errorf("%d alerts, and %d in the engine", alerts, len(want))
	}
	r.Title, r.Data = "Quillmere", "none"
	standsAlone(t, written(t, r.HTML))
	changed := 0
	text := written(t, r.Markdown)
	for _, a := range want {
		seen := a.Steps[0].Evidence
		if seen == nil || seen.Recompute == "" {
			continue
		}
		command, now := "Its numbers again:\n\n    "+seen.Recompute+"\n", a.Opening.Recompute
		if now != seen.Recompute {
			changed++
			command += "\nThe same as the data were corrected since:\n\n    " + now + "\n"
		}
		if !strings.Contains(text, command) {
			t.Errorf("alert %s: the report lacks %q", a.ID, command)
		}
	}
	if changed == 0 || strings.Count(text, "As the data were corrected since: ") != changed {
		t.Errorf("%d alerts were corrected", changed)
	}
	if !strings.Contains(text, "Silence is no proof of safety") {
		t.Error("Markdown lacks its cautions")
	}
}

func marshal(t *testing.T, v any) string {
	t.Helper()
	b, err := json.MarshalIndent(v, "", " ")
	if err != nil {
		t.Fatal(err)
	}
	return string(b)
}

const atEvents = `
name = "quillmere"
[[indicator]]
name = "wound"
series = ["*/wound"]
measure = "proportion"
unit = "operations"
every = "1d"
events = "each"
horizon = "30d"
windows = ["50 trials"]
looks = "arrival"
[indicator.baseline]
kind = "known"
rate = 0.1
[[indicator]]
name = "fall"
series = ["*/fall"]
unit = "days"
every = "1d"
events = "each"
exposure = "clock"
clock = { size = 1 }
horizon = "30d"
windows = ["28d"]
looks = ["slot", "arrival"]
[indicator.baseline]
kind = "known"
rate = 0.3
`

// TestLooksAtEvents: looks within slots are taken once, too, whatever the hour
// at which messages put them beyond change.
func TestLooksAtEvents(t *testing.T) {
	setup, err := config.Parse([]byte(atEvents), "setup.toml")
	if err != nil {
		t.Fatal(err)
	}
	e, rec, d := newEngine(setup), report.NewRecorder(setup), wire.NewDecoder(wire.Limits{})
	position := uint64(1)
	for i := range 500 {
		at := time.Date(2026, 1, 1, 0, 0, 0, 0, time.UTC).Add(time.Duration(i) * 7 * time.Hour)
		position++
		text := fmt.Sprintf(`{"series":"east/wound","id":"o%d","at":%q,"events":%d,"exposure":1}`, i, at.Format(time.RFC3339), (i*i%7)/4)
		if i%9 == 0 {
			text += fmt.Sprintf("\n"+`{"series":"east/fall","id":"f%d","at":%q,"events":1}`, i, at.Format(time.RFC3339))
		}
		m := d.Decode(wire.Raw{Position: position, Subject: "quillmere.in.0.obs", Data: []byte(text)})
		m.Time, m.HasTime, m.Items = monitor.InstantOf(at), true, slices.Clone(m.Items)
		rec.Play(e, m)
		take(t, rec, e)
	}
	r, err := rec.Report(context.Background(), e, report.Options{Seed: 1, Draws: 100, Pictures: 3})
	if err != nil {
		t.Fatal(err)
	}
	looks := int64(0)
	for _, in := range r.Indicators {
		if in.Looks < 50 {
			t.Errorf("%s: %d looks", in.Cfg.Name, in.Looks)
		}
		looks += in.Looks + in.Withheld
	}
	if a := e.Account(); looks != a.Looks+a.WithheldLooks {
		t.Errorf("%d looks were taken, and %d fell due", looks, a.Looks+a.WithheldLooks)
	}
}
