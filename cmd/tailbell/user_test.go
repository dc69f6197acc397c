package main

import (
	"encoding/json"
	"os"
	"path/filepath"
	"strings"
	"testing"
)

// TestUsers adds, lists and revokes users as a person does.
func TestUsers(t *testing.T) {
	plain := wardSetup(t)
	if code, _, stderr := run(t, "user", "list", "--config", plain); code != 1 || !strings.Contains(stderr, `write e.g. users = "tailbell-users" under [page]`) {
		t.Errorf("exit code %d, %s", code, stderr)
	}
	setup := edited(t, plain, "paged.toml", "[[indicator]]", "[page]\nusers = \"who\"\n[[indicator]]")
	user := func(args ...string) (int, string, string) {
		return run(t, append(append([]string{"user"}, args...), "--config", setup)...)
	}
	if code, stdout, _ := user("list"); code != 0 || !strings.HasPrefix(stdout, "No users: ") {
		t.Errorf("exit code %d, %s", code, stdout)
	}
	for _, args := range [][]string{{"add", "Asha Venn"}, {"add", "Asha Venn", "--role", "root"}} {
		if code, stdout, stderr := user(args...); code != 2 || stdout != "" || !strings.Contains(stderr, "--role") {
			t.Errorf("%v: exit code %d, %s", args, code, stderr)
		}
	}
	code, token, stderr := user("add", "Asha Venn", "--role", "act")
	token = strings.TrimSuffix(token, "\n")
	if code != 0 || !strings.HasPrefix(token, "tailbell-token-") || len(strings.Fields(token)) != 1 || !strings.Contains(stderr, "Asha Venn may now look at the page and act on alerts") || strings.Contains(stderr, token) {
		t.Errorf("exit code %d, %q, %s", code, token, stderr)
	}
	if code, _, stderr := user("add", "asha venn", "--role", "read"); code != 1 || !strings.Contains(stderr, "revoke that one first") {
		t.Errorf("exit code %d, %s", code, stderr)
	}
	if code, _, stderr := user("revoke", "nobody"); code != 1 || !strings.Contains(stderr, "tailbell user list") {
		t.Errorf("exit code %d, %s", code, stderr)
	}
	if code, stdout, _ := user("revoke", "Asha Venn"); code != 0 || stdout != "Asha Venn may no longer sign in.\n" {
		t.Errorf("exit code %d, %s", code, stdout)
	}
	user("add", "audit", "--role", "read")
	_, stdout, _ := user("list")
	if lines := strings.Split(stdout, "\n"); len(lines) != 4 || !strings.HasSuffix(lines[1], "  Asha Venn") || !strings.HasPrefix(lines[2], "read  2") || !strings.HasSuffix(lines[2], "  -           audit") && !strings.HasSuffix(lines[2], "-  audit") {
		t.Errorf("%s", stdout)
	}
	_, stdout, _ = user("list", "--json")
	var rows []userRow
	if err := json.Unmarshal([]byte(stdout), &rows); err != nil || len(rows) != 2 || rows[0].Revoked == nil || rows[1].Revoked != nil || rows[1].Role != "read" {
		t.Errorf("%v, %s", err, stdout)
	}
	text, err := os.ReadFile(filepath.Join(filepath.Dir(setup), "who"))
	if err != nil || strings.Contains(string(text), token) || strings.Contains(stdout, "sha256") {
		t.Errorf("%v, %s", err, text)
	}
}
