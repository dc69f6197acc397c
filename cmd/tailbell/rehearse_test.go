package main

import (
	"encoding/json"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"tailbell/monitor/rehearse/plant"
)

// output runs a command that must succeed, and returns what it printed.
func output(t *testing.T, args ...string) string {
	t.Helper()
	code, stdout, stderr := run(t, args...)
	if code != 0 {
		t.Fatalf("%v: exit code %d: %s", args, code, stderr)
	}
	return stdout
}

// rehearsed runs "tailbell rehearse" on the coal set-up and reads its JSON.
func rehearsed(t *testing.T, args ...string) plant.Report {
	t.Helper()
	out := output(t, append([]string{"rehearse", "--config", "../../testdata/coal/coal.toml", "--ratio", "0.2,0.4", "--length", "15y", "--json"}, args...)...)
	var r plant.Report
	if err := json.Unmarshal([]byte(out), &r); err != nil {
		t.Fatal(err)
	}
	return r
}

func TestRehearseInvented(t *testing.T) {
	figure := filepath.Join(t.TempDir(), "rehearsal.svg")
	r := rehearsed(t, "--histories", "60", "--years", "40", "--figure", figure)
	if f := r.Found[0]; f.Ratio != 0.2 || f.InTime.Share < 0.9 || f.Delay == nil {
		t.Errorf("a rate of a fifth is found %+v", f)
	}
	if r.On != "invented" || !r.False[0].Told || len(r.Predict) != 4 {
		t.Errorf("%+v", r)
	}
	if b, err := os.ReadFile(figure); err != nil || !strings.Contains(string(b), "<svg") {
		t.Errorf("the figure: %v", err)
	}
}

func TestRehearseReal(t *testing.T) {
	known := filepath.Join(t.TempDir(), "known.csv")
	if err := os.WriteFile(known, []byte("series,start,end,direction\ncoal-mines/explosion,1890-03-10,1962-01-01,lower\n"), 0o600); err != nil {
		t.Fatal(err)
	}
	r := rehearsed(t, "--histories", "20", "--known", known, "--zone", "UTC", "../../testdata/coal/coal.csv")
	a := r.Against[0]
	if a.Sensitivity.Count != 1 || !a.Episodes[0].From.Equal(r.Against[0].Episodes[0].From) || a.Predictive.Count != a.Predictive.Of {
		t.Errorf("against the known change: %+v", a)
	}
	// The first alert opens on 2 January 1900: checked in testdata/coal.
	if d := a.Episodes[0].Days; d < 3584 || d > 3586 {
		t.Errorf("found after %g days", d)
	}
	text := output(t, "rehearse", "--config", "../../testdata/coal/coal.toml", "--ratio", "0.2", "--length", "5y", "--histories", "5", "--zone", "UTC", "../../testdata/coal/coal.csv")
	if !strings.Contains(text, "can't be told") || !strings.Contains(text, "Silence is no proof of safety") {
		t.Errorf("of a history without labels:\n%s", text)
	}
}

func TestRehearseAsksForPeers(t *testing.T) {
	path := filepath.Join(t.TempDir(), "tailbell.toml")
	text := strings.Replace(archiveSetup, "kind = \"known\"\nrate = 0.01\n", "kind = \"peers\"\nspan = \"364d\"\n", 1)
	if err := os.WriteFile(path, []byte(text), 0o600); err != nil {
		t.Fatal(err)
	}
	code, stdout, stderr := run(t, "rehearse", "--config", path, "--exposure", "22", "--rate", "0.01", "--histories", "5")
	if code != 2 || stdout != "" || !strings.Contains(stderr, "--peers is missing") {
		t.Errorf("exit code %d, %s%s", code, stdout, stderr)
	}
}
