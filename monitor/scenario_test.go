package monitor_test

import (
	"bytes"
	"encoding/json"
	"flag"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"

	"tailbell/config"
	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/life"
)

var update = flag.Bool("update", false, "rewrite the expected output of the scenarios")

// A scenario is a text file: a set-up between "setup" and "end", then one
// input a line: the JSON of an observation (or several) or of an act, or
// "tick TIME", "live TIME", "at TIME" (the bus's stored time of what
// follows). Lines beginning with # are comments. After the line "----" stands
// what is expected.
func TestScenarios(t *testing.T) {
	files, err := filepath.Glob("../testdata/monitor/*.txt")
	if err != nil || len(files) == 0 {
		t.Fatalf("no scenarios: %v", err)
	}
	for _, file := range files {
		t.Run(strings.TrimSuffix(filepath.Base(file), ".txt"), func(t *testing.T) {
			text, err := os.ReadFile(file)
			if err != nil {
				t.Fatal(err)
			}
			input, want, _ := strings.Cut(string(text), "----\n")
			messages := readScenario(t, input)
			got := render(t, play(t, messages, 0))
			for _, batch := range []int{1, 2, 3, 7} {
				if diff := cmp.Diff(got, render(t, play(t, messages, batch))); diff != "" {
					t.Errorf("restarted every %d messages (-undisturbed +restarted):\n%s", batch, diff)
				}
			}
			if *update {
				if err := os.WriteFile(file, []byte(input+"----\n"+got), 0o644); err != nil {
					t.Fatal(err)
				}
				return
			}
			if diff := cmp.Diff(want, got); diff != "" {
				t.Errorf("-want +got:\n%s", diff)
			}
		})
	}
}

// outcome is what a run of a scenario leaves.
type outcome struct {
	store   *monitor.Memory
	engine  *monitor.Engine
	account monitor.Account
}

// play applies the messages, drained and restored after every so many; 0 for
// never.
func play(t *testing.T, messages []monitor.Message, restart int) outcome {
	t.Helper()
	store := monitor.NewMemory()
	e := monitor.New(monitor.Partition{Of: 1, KeyParts: 1})
	for i := range messages {
		e.Apply(&messages[i])
		if restart > 0 && (i+1)%restart == 0 {
			store.Commit(e.Drain())
			var err error
			if e, err = store.Reopen(monitor.Partition{Of: 1, KeyParts: 1}); err != nil {
				t.Fatalf("restoring after message %d: %v", i+1, err)
			}
		}
	}
	store.Commit(e.Drain())
	return outcome{store, e, e.Account()}
}

func readScenario(t *testing.T, text string) []monitor.Message {
	t.Helper()
	decoder := wire.NewDecoder(wire.Limits{})
	var messages []monitor.Message
	var setup *strings.Builder
	stored := monitor.Instant(0)
	add := func(m monitor.Message) {
		m.Position, m.Stored = uint64(len(messages)+1), stored
		messages = append(messages, m)
	}
	for n, line := range strings.Split(text, "\n") {
		word, rest, _ := strings.Cut(line, " ")
		switch {
		case setup != nil && line == "end":
			s, err := config.Parse([]byte(setup.String()), "set-up")
			if err != nil {
				t.Fatal(err)
			}
			add(monitor.Message{Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: s}})
			setup = nil
		case setup != nil:
			setup.WriteString(line + "\n")
		case line == "setup":
			setup = new(strings.Builder)
		case line == "" || line[0] == '#':
		case word == "at" || word == "tick" || word == "live":
			at, err := wire.ParseTime(rest)
			if err != nil {
				t.Fatalf("line %d: %v", n+1, err)
			}
			stored = at
			switch word {
			case "tick":
				add(monitor.Message{Kind: monitor.Tick})
			case "live":
				add(monitor.Message{Kind: monitor.Live})
			}
		case wire.IsAct([]byte(line)):
			add(decoder.Decode(wire.Raw{Subject: "x.in.0.act", Data: []byte(line)}))
		default:
			add(decoder.Decode(wire.Raw{Subject: "x.in.0.obs", Data: []byte(line)}))
		}
	}
	return messages
}

// render writes what a reader must see of an outcome.
func render(t *testing.T, o outcome) string {
	t.Helper()
	var b bytes.Buffer
	for _, n := range o.store.Steps {
		renderStep(&b, &n)
	}
	for _, r := range o.store.Refused {
		fmt.Fprintf(&b, "refused %d.%d %s: %s\n", r.Position, r.Index, r.Reason, r.Detail)
	}
	if !o.account.Balanced() {
		t.Errorf("the account does not balance: %+v", o.account)
	}
	account, err := json.Marshal(o.account)
	if err != nil {
		t.Fatal(err)
	}
	for _, c := range o.engine.Conditions() {
		fmt.Fprintf(&b, "condition %s %s %s since %s: %s\n", c.Series, c.Window, c.Kind, c.Since.Time().Format("2006-01-02T15:04Z"), c.Text)
	}
	fmt.Fprintf(&b, "account %s\n", account)
	return b.String()
}

func renderStep(b *bytes.Buffer, n *life.Notice) {
	r := &n.Record
	late := ""
	if r.Late {
		late = " late"
	}
	fmt.Fprintf(b, "%s %s %s %s#%d: %s%s -> %s", n.Step.At.Format("2006-01-02T15:04Z"), r.ID, r.Series, r.Direction, r.Number, n.Step.Kind, late, n.Step.Condition)
	if n.Step.By != "" || n.Step.Why != "" {
		fmt.Fprintf(b, " (%s: %s)", n.Step.By, n.Step.Why)
	}
	b.WriteByte('\n')
	if h := r.Silence; h != nil && n.Step.Kind == life.StepOpened {
		last := "never"
		if h.Last != nil {
			last = h.Last.Format("2006-01-02T15:04Z")
		}
		fmt.Fprintf(b, "    last heard %s, expected within %s\n", last, h.Within)
	}
	if e := n.Step.Evidence; e != nil {
		fmt.Fprintf(b, "    %s to %s: %d in %s %s, expected %.4g, p %.5g, critical %d, late %d, rate %.4g (%.4g to %.4g)\n",
			e.Window, e.To.Format("2006-01-02"), e.Events, e.Exposure, e.Unit, e.Expected, e.P, e.Critical, e.LateEvents,
			e.Rate, e.RateLower, e.RateUpper)
		if e.Shortened > 0 || e.SignedOff || e.AfterSignOff > 0 {
			fmt.Fprintf(b, "    from %s, %d slots shorter, signed off %t, %d slots changed after\n", e.From.Format("2006-01-02"), e.Shortened, e.SignedOff, e.AfterSignOff)
		}
		for _, c := range e.Carriers {
			fmt.Fprintf(b, "    carried by %s: %d in %s\n", c.Series, c.Events, c.Exposure)
		}
		renderWait(b, e)
		renderBaseline(b, e)
	}
	if len(r.IDs) > 0 && n.Step.Kind == life.StepOpened {
		fmt.Fprintf(b, "    ids %s\n", strings.Join(r.IDs, " "))
	}
	if s := r.Since; s != nil {
		fmt.Fprintf(b, "    since %s to %s: %d in %s\n", s.From.Format("2006-01-02"), s.To.Format("2006-01-02"), s.Events, s.Exposure)
	}
}

// renderWait writes how long the events took, of a look at an arrival.
func renderWait(b *bytes.Buffer, e *life.Evidence) {
	w := e.Wait
	if w == nil {
		return
	}
	const moment = "2006-01-02T15:04:05Z07:00"
	fmt.Fprintf(b, "    %s to %s", e.From.Format(moment), e.To.Format(moment))
	if w.Previous != nil {
		fmt.Fprintf(b, ", one before at %s", w.Previous.Format(moment))
	}
	if w.Events > 0 {
		fmt.Fprintf(b, ", %d since %s in %s, usual %.5g", w.Events, w.First.Format(moment), w.Exposure, w.Usual)
	}
	if w.P != nil {
		fmt.Fprintf(b, ", p %.5g", *w.P)
	}
	b.WriteByte('\n')
}

// renderBaseline writes by what a look was judged, unless it is no more than a
// known rate.
func renderBaseline(b *bytes.Buffer, e *life.Evidence) {
	r := &e.Baseline
	var words []string
	add := func(format string, args ...any) { words = append(words, fmt.Sprintf(format, args...)) }
	if r.Version != "" {
		add("%q of set-up %d", r.Version, e.SetupVersion)
	}
	if r.Exposure != "" {
		add("%d in %s", r.Events, r.Exposure)
	}
	if r.From != nil {
		add("%s to %s", r.From.Format("2006-01-02"), r.To.Format("2006-01-02"))
	}
	if r.LeftOut > 0 {
		add("%d slots left out", r.LeftOut)
	}
	if r.Weighted != nil {
		add("weighted %.6g", *r.Weighted)
	}
	if r.Peers > 0 {
		add("%d peers", r.Peers)
	}
	if r.Between != nil {
		add("between %.4g", *r.Between)
	}
	if r.Spread > 0 {
		add("spread %g", r.Spread)
	}
	if r.Strata != "" {
		add("strata by %s", r.Strata)
	}
	if e.Weighted != nil {
		add("exposure weighted %.6g", *e.Weighted)
	}
	if e.Provisional > 0 {
		add("%d slots provisional", e.Provisional)
	}
	if f := r.First; f != nil && f.Ratio != nil {
		add("first reference %d in %s, ratio %.4g", f.Events, f.Exposure, *f.Ratio)
	}
	if a := e.Allowance; a != nil {
		add("limit %.5g for %s on each %s", e.Limit, a.Text, a.For)
		add("%.4g a year here, %.4g on %d series", a.Here, a.All, a.Series)
	}
	if len(words) > 0 || r.Kind != "known" {
		fmt.Fprintf(b, "    %s: %s\n    %s\n", r.Kind, strings.Join(words, ", "), e.Test)
	}
}
