package main

import (
	"encoding/json"
	"errors"
	"io/fs"
	"os"
	"path/filepath"
	"regexp"
	"strings"
	"testing"

	"github.com/spf13/cobra"
	"github.com/spf13/pflag"

	"tailbell/ingest/wire"
	"tailbell/monitor"
	"tailbell/monitor/store"
)

func TestWrongCommandLines(t *testing.T) {
	for _, c := range []struct{ line, says string }{
		{"alrt list", `there is no command "tailbell alrt"; did you mean "alert"?`},
		{"alert lst", `there is no command "tailbell alert lst"; did you mean "list"?`},
		{"help alrt", `there is no command "tailbell alrt"`},
		{"alert show", "ALERT is missing: tailbell alert show ALERT"},
		{"feed", "FILE is missing: tailbell feed FILE..."},
		{"store copy a", "TO is missing: tailbell store copy FOLDER|FILE TO"},
		{"status now", `"now" is one argument too many: tailbell status`},
		{"alert show a b", `"b" is one argument too many`},
		{"status --foo", "unknown flag: --foo (tailbell status --help says more)"},
		{"alert list --max many", `invalid argument "many" for "--max"`},
		{"alert list --max 0", "--max 0"},
		{"alert list --series a//b", `--series "a//b": not a pattern of series names: part 2 is empty`},
		{"refused show first", `"first" is not the number of a refusal`},
		{"run --health 192.0.2.1:80", `--health "192.0.2.1:80": only loopback`},
		{"run --health 4870", `--health "4870" is no address`},
		{"run --log-level loud", `--log-level "loud"`},
		{"alert close x --by B", "--why is missing"},
		{"alert note x --by B", "--why is missing"},
	} {
		code, stdout, stderr := run(t, strings.Split(c.line, " ")...)
		if code != 2 || stdout != "" || !strings.Contains(stderr, c.says) {
			t.Errorf("%s: exit code %d, %q instead of %q", c.line, code, stderr, c.says)
		}
	}
}

// TestOptionsSayWhatTheyTake holds that no option shows people a type of the
// language in the place of what it takes.
func TestOptionsSayWhatTheyTake(t *testing.T) {
	var look func(c *cobra.Command)
	look = func(c *cobra.Command) {
		c.LocalFlags().VisitAll(func(f *pflag.Flag) {
			if takes, _ := pflag.UnquoteUsage(f); takes != strings.ToUpper(takes) {
				t.Errorf("%s --%s takes %q", c.CommandPath(), f.Name, takes)
			}
		})
		for _, sub := range c.Commands() {
			look(sub)
		}
	}
	look(newRootCommand())
}

func TestArgumentsOfUseLines(t *testing.T) {
	for use, want := range map[string]struct{ needed, most int }{
		"list": {0, 0}, "show ALERT": {1, 1}, "copy FOLDER|FILE TO": {2, 2}, "feed FILE...": {1, -1},
		"exact [FILE.csv | -]": {0, 1}, "baseline [HISTORY...]": {0, -1},
	} {
		if a := argumentsOf(use); len(a.needed) != want.needed || a.most != want.most {
			t.Errorf("%s: %d needed, %d at most", use, len(a.needed), a.most)
		}
	}
}

// wardSetup is a set-up of one deployment in a folder of its own.
func wardSetup(t *testing.T) string {
	t.Helper()
	path := filepath.Join(t.TempDir(), "tailbell.toml")
	text := `name = "quillmere"
folder = "data"
[[indicator]]
name = "fall"
noun = "falls"
series = ["quillmere-east/*/fall"]
unit = "bed-days"
per = 1000
every = "1d"
events = "counted"
settle = "1d"
horizon = "30d"
windows = ["7d"]
tails = ["upper"]
p_limit = 0.01
quiet = 3
[indicator.baseline]
kind = "known"
rate = 6
`
	if err := os.WriteFile(path, []byte(text), 0o600); err != nil {
		t.Fatal(err)
	}
	return path
}

// edited writes a variant of the set-up beside it.
func edited(t *testing.T, path, name, before, after string) string {
	t.Helper()
	text, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	changed := strings.ReplaceAll(string(text), before, after)
	if changed == string(text) {
		t.Fatalf("nothing to replace: %s", before)
	}
	to := filepath.Join(filepath.Dir(path), name)
	if err := os.WriteFile(to, []byte(changed), 0o600); err != nil {
		t.Fatal(err)
	}
	return to
}

func TestBeforeTheFirstRun(t *testing.T) {
	setup := wardSetup(t)
	folder := filepath.Join(filepath.Dir(setup), "data")
	for _, line := range []string{"alert list", "alert show x", "refused list", "status", "alert acknowledge x --by B"} {
		code, _, stderr := run(t, append(strings.Fields(line), "--config", setup)...)
		if code != 1 || !strings.Contains(stderr, "nothing has run yet in "+folder) {
			t.Errorf("%s: exit code %d, %s", line, code, stderr)
		}
	}
	if code, _, _ := run(t, "run", "--config", setup, "--health", "nowhere"); code != 2 {
		t.Errorf("run with a bad address: exit code %d", code)
	}
	if _, err := os.Stat(folder); !errors.Is(err, fs.ErrNotExist) {
		t.Errorf("the folder was made: %v", err)
	}
}

// TestAnotherDeploymentsFolder sees that a folder with a store of another name
// is refused before a bus is begun in it.
func TestAnotherDeploymentsFolder(t *testing.T) {
	setup := wardSetup(t)
	folder := filepath.Join(filepath.Dir(setup), "data")
	if err := os.Mkdir(folder, 0o700); err != nil {
		t.Fatal(err)
	}
	st, err := store.Create(filepath.Join(folder, "partition-0.store"),
		store.Identity{Deployment: "ferrybill", Partitions: 1, KeyParts: 1}, store.Options{})
	if err := errors.Join(err, st.Close()); err != nil {
		t.Fatal(err)
	}
	data := filepath.Join(t.TempDir(), "falls.csv")
	if err := os.WriteFile(data, []byte("series,at,events\nquillmere-east/ward-1/fall,2026-03-02T00:00:00Z,1\n"), 0o600); err != nil {
		t.Fatal(err)
	}
	for _, args := range [][]string{{"run", "--health", "off"}, {"feed", data}, {"alert", "list"}} {
		code, _, stderr := run(t, append(args, "--config", setup)...)
		if code != 1 || !strings.Contains(stderr, `holds the deployment "ferrybill", the set-up is of "quillmere"`) {
			t.Errorf("%v: exit code %d, %s", args, code, stderr)
		}
	}
	left, err := os.ReadDir(folder)
	if err != nil || len(left) != 1 {
		t.Errorf("%v, left in the folder: %v", err, left)
	}
}

func TestWhoActs(t *testing.T) {
	t.Setenv(byVariable, " B. Ostrander ")
	a := acting{}
	if err := a.check(); err != nil || a.act.By != "B. Ostrander" {
		t.Errorf("%v, %q", err, a.act.By)
	}
	a = acting{act: monitor.Act{By: "M. Quell"}}
	if err := a.check(); err != nil || a.act.By != "M. Quell" {
		t.Errorf("%v, %q", err, a.act.By)
	}
	t.Setenv(byVariable, "")
	a = acting{}
	if err := a.check(); os.Getuid() == 0 && err == nil || a.act.By == "root" {
		t.Errorf("root acts as %q", a.act.By)
	}
}

func TestWhatWasRefused(t *testing.T) {
	act := wire.EncodeAct(nil, &monitor.Act{Kind: monitor.Note, Alert: "x", By: "B", Why: "w"})
	for _, c := range []struct {
		refusal monitor.Refusal
		want    string
	}{
		{monitor.Refusal{Reason: monitor.NoSuchAlert}, "act"},
		{monitor.Refusal{Reason: monitor.BadTime, Raw: act}, "act"},
		{monitor.Refusal{Reason: monitor.NeedsRebuild}, "set-up"},
		{monitor.Refusal{Reason: monitor.BeyondHorizon, Raw: []byte(`{"series":"a"}`)}, "data"},
	} {
		if got := whatRefused(&c.refusal); got != c.want {
			t.Errorf("%s: %s, want %s", c.refusal.Reason, got, c.want)
		}
	}
}

// TestStatusKeys sees that what programs read has one style of keys, and no
// null where a list may be empty.
func TestStatusKeys(t *testing.T) {
	text, err := json.Marshal(statusReply{Partitions: []partStatus{{
		Conditions: []conditionRow{{}}, Outlets: []outletRow{{}}, Account: monitor.Account{RefusedBy: map[monitor.Reason]int64{}},
	}}})
	if err != nil {
		t.Fatal(err)
	}
	if odd := regexp.MustCompile(`"[^":]*[A-Z][^":]*":`).Find(text); odd != nil {
		t.Errorf("the key %s in %s", odd, text)
	}
}
