package gate

import (
	"bytes"
	"crypto/rand"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"regexp"
	"strings"
	"sync"
	"testing"
	"time"
)

var today = time.Date(2026, 3, 2, 8, 0, 0, 0, time.UTC)

func TestBookKeepsNoToken(t *testing.T) {
	b := Book{filepath.Join(t.TempDir(), "deeper", "users")}
	token, err := b.Add("Asha Venn", Act, today, bytes.NewReader(bytes.Repeat([]byte{0xfb}, tokenBytes)))
	if err != nil {
		t.Fatal(err)
	}
	if want := "tailbell-token--_v7-_v7-_v7-_v7-_v7-_v7-_v7-_v7-_v7-_v7-_s"; token != want {
		t.Errorf("%s", token)
	}
	text, err := os.ReadFile(b.Path)
	if err != nil {
		t.Fatal(err)
	}
	if strings.Contains(string(text), token) || strings.Contains(string(text), token[len(tokenMark):]) {
		t.Errorf("the file holds the token:\n%s", text)
	}
	entries, err := os.ReadDir(filepath.Dir(b.Path))
	if err != nil {
		t.Fatal(err)
	}
	for _, e := range entries {
		info, err := e.Info()
		if err != nil || info.Mode().Perm() != 0o600 {
			t.Errorf("%s has mode %v, %v", e.Name(), info.Mode(), err)
		}
	}
	users, err := b.Users()
	if err != nil || len(users) != 1 || users[0].Name != "Asha Venn" || users[0].Role != Act || !users[0].Added.Equal(today) || !users[0].Active() {
		t.Errorf("%+v, %v", users, err)
	}
	if u, ok := holder(users, token); !ok || u.Name != "Asha Venn" {
		t.Errorf("%+v", u)
	}
	for _, wrong := range []string{"", token[:len(token)-1], token + "A", strings.ToUpper(token), users[0].digest.String()} {
		if u, ok := holder(users, wrong); ok {
			t.Errorf("%q is held by %+v", wrong, u)
		}
	}
}

func TestBookRevokesAndTakesBack(t *testing.T) {
	b := Book{filepath.Join(t.TempDir(), "users")}
	first := addUser(t, b.Path, "Asha Venn", Read)
	if _, err := b.Add("asha venn", Act, today, rand.Reader); err == nil || !strings.Contains(err.Error(), "already") {
		t.Errorf("a second one of the name: %v", err)
	}
	if err := b.Revoke("Nobody", today); !errors.Is(err, ErrNoUser) {
		t.Error(err)
	}
	if err := b.Revoke("Asha Venn", today); err != nil {
		t.Fatal(err)
	}
	if err := b.Revoke("Asha Venn", today); !errors.Is(err, ErrNoUser) {
		t.Error(err)
	}
	users, err := b.Users()
	if err != nil || len(users) != 1 || users[0].Active() || !users[0].Revoked.Equal(today) {
		t.Errorf("%+v, %v", users, err)
	}
	if _, ok := holder(users, first); ok {
		t.Error("a revoked token is held")
	}
	// What a revoked user's place holds is no token of anything.
	users[0].digest = digestOf(first)
	if _, ok := holder(users, first); ok {
		t.Error("a revoked user holds a token")
	}
	addUser(t, b.Path, "Asha Venn", Act)
	if users, err = b.Users(); err != nil || len(users) != 1 || !users[0].Active() || users[0].Role != Act {
		t.Errorf("%+v, %v", users, err)
	}
}

func TestBookRefusesNames(t *testing.T) {
	b := Book{filepath.Join(t.TempDir(), "users")}
	for _, name := range []string{"", " ", "a\nb", "a\x00", "a\u202eb", "a\u200bb", " a", "a ", "a  b", "a\u00a0b", "a\xff", strings.Repeat("a", maxName+1)} {
		if _, err := b.Add(name, Read, today, rand.Reader); err == nil {
			t.Errorf("%q was taken", name)
		}
	}
	for _, name := range []string{"a", "Ward 3, night", "Åsa Ö.", "夜勤", strings.Repeat("é", maxName)} {
		if _, err := b.Add(name, Read, today, rand.Reader); err != nil {
			t.Errorf("%q: %v", name, err)
		}
	}
}

func TestBookRefusesFiles(t *testing.T) {
	digest := strings.Repeat("ab", 32)
	user := func(name, role, token string) string {
		return fmt.Sprintf(`{"name":%q,"role":%q,"token_sha256":%q,"added":"2026-03-02T08:00:00Z"}`, name, role, token)
	}
	for text, want := range map[string]string{
		"": "can't be read", "{": "can't be read", `{"format":1,"users":[],"more":1}`: "unknown field", `{"format":2,"users":[]}`: "format 2", `{"users":[]}`: "format 0",
		`{"format":1,"users":[` + user("a", "root", digest) + `]}`:                                  "no role",
		`{"format":1,"users":[` + user("a", "act", "") + `]}`:                                       "token_sha256",
		`{"format":1,"users":[` + user("a", "act", digest[1:]) + `]}`:                               "token_sha256",
		`{"format":1,"users":[` + user("", "act", digest) + `]}`:                                    "name is empty",
		`{"format":1,"users":[` + user("a", "act", digest) + "," + user("A", "read", digest) + `]}`: "user 2 has the name",
	} {
		path := filepath.Join(t.TempDir(), "users")
		if err := os.WriteFile(path, []byte(text), 0o600); err != nil {
			t.Fatal(err)
		}
		_, err := Book{path}.Users()
		if err == nil || !strings.Contains(err.Error(), want) || strings.Contains(err.Error(), digest[1:]) {
			t.Errorf("%s: %v, want %q", text, err, want)
		}
		if _, err := (Book{path}).Add("new", Read, today, rand.Reader); err == nil {
			t.Errorf("%s was written over", text)
		}
	}
	open := filepath.Join(t.TempDir(), "users")
	addUser(t, open, "a", Read)
	for _, mode := range []os.FileMode{0o640, 0o604, 0o620, 0o602} {
		if err := os.Chmod(open, mode); err != nil {
			t.Fatal(err)
		}
		if _, err := (Book{open}).Users(); err == nil || !strings.Contains(err.Error(), "chmod 600") {
			t.Errorf("%v: %v", mode, err)
		}
	}
}

// TestBookIsChangedByOneAtATime adds users from many places at once.
func TestBookIsChangedByOneAtATime(t *testing.T) {
	b := Book{filepath.Join(t.TempDir(), "users")}
	var group sync.WaitGroup
	for i := range 20 {
		group.Go(func() {
			if _, err := b.Add(fmt.Sprint("user ", i), Read, today, rand.Reader); err != nil {
				t.Error(err)
			}
		})
	}
	group.Wait()
	if users, err := b.Users(); err != nil || len(users) != 20 {
		t.Errorf("%d users, %v", len(users), err)
	}
	left, err := filepath.Glob(filepath.Join(filepath.Dir(b.Path), ".users-*"))
	if err != nil || len(left) > 0 {
		t.Errorf("left behind: %v, %v", left, err)
	}
}

func TestTokensHave256Bits(t *testing.T) {
	seen := map[string]bool{}
	form := regexp.MustCompile(`^tailbell-token-[A-Za-z0-9_-]{43}$`)
	for range 1000 {
		token, err := newToken(rand.Reader)
		if err != nil || !form.MatchString(token) || seen[token] {
			t.Fatalf("%s, %v", token, err)
		}
		seen[token] = true
	}
	if _, err := newToken(strings.NewReader("too short")); err == nil {
		t.Error("a token without enough random bytes")
	}
}
