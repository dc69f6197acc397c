package change_test

import (
	"fmt"
	"strings"
	"testing"
	"time"

	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/change"
	"tailbell/monitor/life"
)

// text is a set-up with two indicators of which the first rings.
const text = `name = "quillmere"
[time]
mode = "history"
[[indicator]]
name = "fall"
series = ["quillmere/*/fall", "quillmere/*/slip"]
unit = "bed-days"
every = "1d"
events = "each"
exposure = "clock"
clock = { size = 10, per = "1d" }
settle = "1d"
horizon = "30d"
since = "2026-01-01"
windows = ["7d", "14d"]
tails = ["upper"]
p_limit = 0.05
quiet = 3
[indicator.baseline]
kind = "known"
rate = 0.001
version = "1"
[[indicator]]
name = "needle"
series = ["quillmere/*/needle"]
unit = "hours"
every = "1d"
windows = ["28d"]
[indicator.baseline]
kind = "known"
rate = 0.001
`

// fallStanza is the first indicator's.
func fallStanza() string {
	return text[strings.Index(text, "[[indicator]]"):strings.LastIndex(text, "[[indicator]]")]
}

func parse(t *testing.T, edits ...string) *config.Setup {
	t.Helper()
	out := text
	for i := 0; i < len(edits); i += 2 {
		if !strings.Contains(out, edits[i]) {
			t.Fatalf("%q is not in the set-up", edits[i])
		}
		out = strings.Replace(out, edits[i], edits[i+1], 1)
	}
	s, err := config.Parse([]byte(out), "set-up")
	if err != nil {
		t.Fatal(err)
	}
	return s
}

// ward is an engine that has rung for one series.
type ward struct {
	t        *testing.T
	engine   *monitor.Engine
	position uint64
	day      time.Time
}

func ring(t *testing.T, s *config.Setup) *ward {
	t.Helper()
	w := &ward{t: t, engine: monitor.New(monitor.Partition{Of: 1, KeyParts: 1}), day: time.Date(2026, 2, 1, 0, 0, 0, 0, time.UTC)}
	w.set(s)
	w.observe("quillmere/ward-1/fall", 2)
	w.pass(3)
	if a := w.engine.Alerts(); len(a) != 1 || a[0].Condition != life.Unacknowledged {
		t.Fatalf("the engine has not rung: %+v", a)
	}
	return w
}

func (w *ward) apply(m monitor.Message) {
	w.position++
	m.Position, m.Stored = w.position, monitor.InstantOf(w.day)
	w.engine.Apply(&m)
}

func (w *ward) set(s *config.Setup) {
	w.apply(monitor.Message{Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: s}})
}

func (w *ward) observe(series string, events int64) {
	at := monitor.InstantOf(w.day.Add(12 * time.Hour))
	w.apply(monitor.Message{Kind: monitor.Observations, Items: []monitor.Item{{Observation: monitor.Observation{
		Series: series, Start: at, End: at, Instant: true, Events: events, HasEvents: true,
	}}}})
}

// pass lets days go by, told by an observation of another ward without events.
func (w *ward) pass(days int) {
	for range days {
		w.day = w.day.AddDate(0, 0, 1)
		w.observe("quillmere/ward-2/fall", 0)
	}
}

func (w *ward) alert() life.Record { return w.engine.Alerts()[0] }

func alerts(w *ward) []change.Alert {
	a := w.alert()
	return []change.Alert{change.AlertOf(&a)}
}

func has(p *change.Plan, key, refused string) bool {
	for _, c := range p.Changes {
		if c.Key == key {
			return (c.Refused != "") == (refused != "") && strings.Contains(c.Refused, refused)
		}
	}
	return false
}

// TestPlanSaysWhatTheEngineDoes brings set-ups into force on an engine that
// rings, and compares with what was said beforehand.
func TestPlanSaysWhatTheEngineDoes(t *testing.T) {
	old := parse(t)
	for name, c := range map[string]struct {
		edits []string
		key   string
		fate  string // of the alert
		check func(w *ward) bool
	}{
		"tail": {
			[]string{`tails = ["upper"]`, `tails = ["lower"]`},
			"indicator[fall].tails", "its tail is watched no longer: it worsens no more, and returns after 3 looks in a row",
			func(w *ward) bool {
				steps := len(w.alert().Steps)
				w.observe("quillmere/ward-1/fall", 9)
				w.pass(2)
				still := len(w.alert().Steps) == steps && w.alert().Condition == life.Unacknowledged
				w.pass(2)
				return still && w.alert().Condition == life.Returned
			},
		},
		"quiet": {
			[]string{"quiet = 3", "quiet = 1"},
			"indicator[fall].quiet", "it returns after a look without a signal; what it holds",
			func(w *ward) bool {
				w.pass(14)
				return w.alert().Condition == life.Returned
			},
		},
		"limit": {
			[]string{"p_limit = 0.05", "p_limit = 0.0000001"},
			"indicator[fall].p_limit", "judged by the new limits and baselines: it may worsen, and returns after 3 looks",
			func(w *ward) bool {
				before := w.alert().Opening
				w.pass(4)
				return w.alert().Condition == life.Returned && w.alert().Opening.P == before.P && w.alert().Opening.Critical == before.Critical
			},
		},
		"pattern": {
			[]string{`"quillmere/*/fall", `, ""},
			"indicator[fall].series", "no pattern matches its series any more, which stays monitored",
			func(w *ward) bool {
				counted, unmonitored := w.engine.Account().Counted, w.engine.Account().Unmonitored
				w.observe("quillmere/ward-1/fall", 9)
				w.observe("quillmere/ward-9/fall", 9)
				a := w.engine.Account()
				w.pass(2)
				return a.Counted == counted+1 && a.Unmonitored == unmonitored+1 && w.alert().Worst.Events > 9
			},
		},
		"fewer windows": {
			[]string{`"7d", "14d"`, `"7d"`},
			"indicator[fall].windows", "only the windows of the new set-up have a say: it may worsen, and returns after 3 looks",
			func(w *ward) bool { // the 14d would signal for another week
				w.pass(7)
				still := w.alert().Condition == life.Unacknowledged
				w.pass(1)
				return still && w.alert().Condition == life.Returned
			},
		},
		"more windows": {
			[]string{`"7d", "14d"`, `"1d", "28d", "7d", "14d"`},
			"indicator[fall].windows", "only the windows of the new set-up have a say",
			func(w *ward) bool { // the 28d is full at once, and signals for longest
				w.pass(2)
				worsened := w.alert().Steps[len(w.alert().Steps)-1].Kind == life.StepWorsened
				w.pass(20)
				return worsened && w.alert().Condition == life.Unacknowledged
			},
		},
		"another order": {
			[]string{`"7d", "14d"`, `"14d", "7d"`},
			"", "",
			func(w *ward) bool { // as if nothing had changed
				steps := len(w.alert().Steps)
				w.pass(13)
				return len(w.alert().Steps) == steps && w.alert().Condition == life.Unacknowledged
			},
		},
		"gone": {
			[]string{fallStanza(), ""},
			"indicator[fall]", "it closes, as no longer monitored; what it holds",
			func(w *ward) bool {
				w.observe("quillmere/ward-1/fall", 9)
				steps := w.engine.Drain().Steps
				last := steps[len(steps)-1]
				return len(w.engine.Alerts()) == 0 && w.engine.Account().Unmonitored == 1 &&
					last.Step.Why == life.NoLongerMonitored && last.Record.Condition == life.Closed && last.Record.Opening.Events == 2
			},
		},
		"title": {[]string{`name = "fall"`, "name = \"fall\"\ntitle = \"Falls\""}, "indicator[fall].title", "", func(*ward) bool { return true }},
	} {
		t.Run(name, func(t *testing.T) {
			w, next := ring(t, old), parse(t, c.edits...)
			p := change.Of(old, next, alerts(w))
			if !p.Fits || c.key != "" && !has(p, c.key, "") {
				t.Errorf("%+v", p)
			}
			if c.fate == "" && len(p.Alerts) > 0 || c.fate != "" && (len(p.Alerts) != 1 || !strings.Contains(p.Alerts[0].Text, c.fate)) {
				t.Errorf("said of the alert: %+v", p.Alerts)
			}
			w.set(next)
			if a := w.engine.Account(); a.SettingsRefused > 0 {
				t.Fatalf("the engine refused it: %+v", a)
			}
			if !c.check(w) {
				t.Errorf("the engine does something else: %+v", w.engine.Alerts())
			}
		})
	}
}

// TestPlanSaysWhatTheEngineRefuses compares the plan's refusals with the
// engine's own.
func TestPlanSaysWhatTheEngineRefuses(t *testing.T) {
	old := parse(t)
	_, needle, _ := strings.Cut(text, "[[indicator]]\nname = \"needle\"")
	for name, c := range map[string]struct {
		edits        []string
		key, refused string // "" where the engine takes it
	}{
		"slot":        {[]string{`clock = { size = 10`, `clock = { size = 11`}, "indicator[fall].clock", "it contradicts what the store holds"},
		"name":        {[]string{`name = "quillmere"`, `name = "ferrybill"`}, "name", "it contradicts"},
		"gone":        {[]string{"[[indicator]]\nname = \"needle\"" + needle, ""}, "indicator[needle]", ""},
		"less":        {[]string{`"7d", "14d"`, `"7d"`}, "indicator[fall].windows", ""},
		"more":        {[]string{`"7d", "14d"`, `"7d", "14d", "28d"`}, "indicator[fall].windows", ""},
		"order":       {[]string{`"7d", "14d"`, `"14d", "7d"`}, "", ""},
		"new":         {[]string{"[[indicator]]\nname = \"needle\"", "[[indicator]]\nname = \"cut\"\nseries = [\"quillmere/*/cut\"]\nunit = \"hours\"\nevery = \"1d\"\nwindows = [\"28d\"]\nbaseline = { kind = \"known\", rate = 0.1 }\n[[indicator]]\nname = \"needle\""}, "indicator[cut]", ""},
		"bus":         {[]string{"[time]", "[bus]\nmax_age = \"10d\"\n[time]"}, "bus.max_age", ""},
		"comment":     {[]string{"[time]", "# nothing\n[time]"}, "", ""},
		"wide":        {[]string{`"quillmere/*/slip"`, `"quillmere/*/slip", "quillmere/*/trip"`}, "indicator[fall].series", ""},
		"long memory": {[]string{`horizon = "30d"`, `horizon = "60d"`}, "indicator[fall].horizon", ""},
	} {
		t.Run(name, func(t *testing.T) {
			w, next := ring(t, old), parse(t, c.edits...)
			p := change.Of(old, next, alerts(w))
			if p.Fits != (c.refused == "") || (c.key == "") != (len(p.Changes) == 0) || c.key != "" && !has(p, c.key, c.refused) || (!p.Fits && len(p.Alerts) > 0) {
				t.Errorf("%+v", p)
			}
			w.set(next)
			if refused := w.engine.Account().SettingsRefused > 0; refused == p.Fits {
				t.Errorf("fits %v, but the engine refused it: %v", p.Fits, refused)
			}
			if fmt.Sprint(monitor.Unfit(old, next) == "") != fmt.Sprint(p.Fits) {
				t.Error("monitor.Unfit says something else")
			}
		})
	}
}

// TestAlertsThatReturnedAreLeftAlone checks that nothing is said of alerts
// that no longer signal, but where it reaches them.
func TestAlertsThatReturnedAreLeftAlone(t *testing.T) {
	old := parse(t)
	r := []change.Alert{{ID: "x", Indicator: "fall", Series: "quillmere/ward-1/fall", Direction: life.Upper, Condition: life.Returned}}
	if p := change.Of(old, parse(t, "quiet = 3", "quiet = 1"), r); len(p.Alerts) > 0 {
		t.Errorf("%+v", p.Alerts)
	}
	if p := change.Of(old, parse(t, `horizon = "30d"`, `horizon = "20d"`), r); len(p.Alerts) != 1 || !strings.HasPrefix(p.Alerts[0].Text, "corrections reach it") {
		t.Errorf("%+v", p.Alerts)
	}
}
