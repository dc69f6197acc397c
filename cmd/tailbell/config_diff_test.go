package main

import (
	"encoding/json"
	"path/filepath"
	"strings"
	"testing"
)

// diffOf runs "config diff --json".
func diffOf(t *testing.T, want int, args ...string) diffReply {
	t.Helper()
	code, stdout, stderr := run(t, append([]string{"config", "diff", "--json"}, args...)...)
	var r diffReply
	if err := json.Unmarshal([]byte(stdout), &r); err != nil || code != want {
		t.Fatalf("exit code %d, want %d: %v, %s%s", code, want, err, stdout, stderr)
	}
	return r
}

// TestConfigDiff compares set-ups with the one in force: before anything has
// run, in a running daemon, and in the store that it leaves.
func TestConfigDiff(t *testing.T) {
	setup := wardSetup(t)
	same := edited(t, setup, "same.toml", "[[indicator]]", "# a comment\n[[indicator]]")
	next := edited(t, setup, "next.toml", "p_limit = 0.01\nquiet = 3", "p_limit = 0.001\nquiet = 5\nhorizon = \"60d\"")
	next = edited(t, next, "next.toml", "horizon = \"30d\"\n", "")
	unfit := edited(t, setup, "unfit.toml", "windows = [\"7d\"]", "windows = [\"7d\", \"14d\"]")
	unfit = edited(t, unfit, "unfit.toml", "events = \"counted\"", "events = \"each\"")
	moved := edited(t, next, "moved.toml", "folder = \"data\"", "folder = \"elsewhere\"")

	if r := diffOf(t, 0, next); !r.Fits || r.InForce != "" || len(r.Notes) != 1 || !strings.Contains(r.Notes[0], "nothing has run yet in "+filepath.Join(filepath.Dir(setup), "data")) {
		t.Errorf("before the first run: %+v", r)
	}
	check := func(t *testing.T) {
		t.Helper()
		if r := diffOf(t, 0, setup); !r.Fits || r.InForce != r.Next || r.Version != 1 || len(r.Changes)+len(r.Alerts) > 0 {
			t.Errorf("the set-up in force: %+v", r)
		}
		if r := diffOf(t, 0, same); !r.Fits || r.InForce == r.Next || len(r.Changes) > 0 {
			t.Errorf("a comment: %+v", r)
		}
		r := diffOf(t, 0, next)
		if !r.Fits || len(r.Changes) != 3 || len(r.Alerts) != 1 || !strings.Contains(r.Alerts[0].Text, "judged by the new limits and baselines: it may worsen, and returns after 5 looks") {
			t.Errorf("limits: %+v", r.Plan)
		}
		r = diffOf(t, 1, unfit)
		if r.Fits || len(r.Changes) != 2 || r.Changes[0].Refused == "" || r.Changes[1].Refused != "" || len(r.Alerts) > 0 {
			t.Errorf("what is refused: %+v", r.Plan)
		}
		if r := diffOf(t, 0, moved, "--config", setup); len(r.Changes) != 4 || r.Changes[0].Key != "folder" || r.Changes[0].Class != "restart" {
			t.Errorf("another folder: %+v", r.Plan)
		}
	}
	t.Run("running", func(t *testing.T) {
		startDaemon(t, setup)
		says(t, 0, []string{"20 counted"}, "feed", "--config", setup, falls(t, "quillmere-east/ward-1/fall", 25, 20))
		check(t)
	})
	t.Run("at rest", check)
	if code, stdout, stderr := run(t, "config", "diff", unfit); code != 1 || stderr != "" ||
		!strings.Contains(stdout, "The running store can't take:\n  indicator[fall].events: counted -> each: it contradicts what the store holds\n\nWithout that, the rest would be:\n\nIn force when enough data have come in:\n  indicator[fall].windows: nothing -> 14d, a look every slot: it is looked at once what is kept and what comes fill it\n\nThe store") ||
		!strings.HasSuffix(stdout, "begin anew with another folder and name.\n") {
		t.Errorf("exit code %d, %s%s", code, stdout, stderr)
	}
	if code, complaint := refusesToRun(t, unfit); code != 1 || !strings.Contains(complaint, "this set-up can't follow the one in force") {
		t.Errorf("run takes what diff says is refused: %d, %s", code, complaint)
	}
	code, stdout, _ := run(t, "config", "diff", next)
	if code != 0 || !strings.Contains(stdout, "In force from the next look on:\n  indicator[fall].p_limit: 0.01 -> 0.001\n") || !strings.Contains(stdout, "In force when enough data have come in:\n  indicator[fall].horizon: 30d -> 60d") {
		t.Errorf("exit code %d, %s", code, stdout)
	}
	t.Run("taken", func(t *testing.T) {
		startDaemon(t, next)
		if r := diffOf(t, 0, next); r.InForce != r.Next || r.Version != 2 {
			t.Errorf("what fits was not taken: %+v", r)
		}
	})
	if code, _, stderr := run(t, "config", "diff", filepath.Join(t.TempDir(), "absent.toml")); code != 1 || !strings.Contains(stderr, "no set-up") {
		t.Errorf("exit code %d, %s", code, stderr)
	}
}
