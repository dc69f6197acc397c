package store

import (
	"bytes"
	"errors"
	"io/fs"
	"os"
	"path/filepath"
	"testing"
	"time"

	"tailbell/monitor"
)

// TestCompactDropsWhatExpired removes refused bytes by their age: a plain copy
// still has them in its free pages, a compacting one has them nowhere.
func TestCompactDropsWhatExpired(t *testing.T) {
	path := filepath.Join(t.TempDir(), "s")
	s, err := Create(path, testIdentity, Options{MapBytes: 1 << 20, Retention: Retention{RawAge: time.Hour}})
	if err != nil {
		t.Fatal(err)
	}
	secret := bytes.Repeat([]byte("Merle Tannquist "), 1000)
	start := monitor.InstantOf(time.Date(2026, 3, 2, 0, 0, 0, 0, time.UTC))
	commit := func(position uint64, after time.Duration, refused ...monitor.Refusal) {
		t.Helper()
		c := monitor.Changes{Position: position, Refused: refused}
		if err := s.Commit(c, Mark{Position: position, Stored: start.Add(after)}); err != nil {
			t.Fatal(err)
		}
	}
	commit(1, 0, monitor.Refusal{Position: 1, Reason: monitor.UnknownField, Detail: "x", Raw: secret})
	for i := range uint64(5) {
		commit(2+i, 2*time.Hour+time.Duration(i)*time.Second)
	}
	row, err := s.RefusedOne(1)
	if err != nil || !row.Expired {
		t.Fatalf("%+v, %v: the bytes should have expired", row.Expired, err)
	}
	plain, tight := filepath.Join(t.TempDir(), "plain"), filepath.Join(t.TempDir(), "tight")
	if _, err := s.CopyTo(plain); err != nil {
		t.Fatal(err)
	}
	n, err := s.CompactTo(tight)
	if err != nil {
		t.Fatal(err)
	}
	if !bytes.Contains(content(t, plain), secret[:16]) {
		t.Log("the plain copy lacks the bytes too: the free pages were used again")
	}
	if b := content(t, tight); bytes.Contains(b, secret[:16]) || int64(len(b)) != n {
		t.Errorf("the compacting copy of %d bytes (said: %d) holds what has expired", len(b), n)
	}
	want, err := s.Check(t.Context())
	if err != nil {
		t.Fatal(err)
	}
	got, err := CheckFile(t.Context(), tight, Options{})
	if err != nil || got.Position != want.Position || got.RefusedRows != want.RefusedRows || got.RefusedRaw != 0 || got.FreeBytes >= want.FreeBytes {
		t.Errorf("the copy is %+v, %v; the original %+v", got, err, want)
	}
	if _, err := s.CompactTo(tight); !errors.Is(err, fs.ErrExist) {
		t.Errorf("over an existing file: %v", err)
	}
	left, err := filepath.Glob(filepath.Join(filepath.Dir(tight), "*.new-*"))
	if err != nil || len(left) > 0 {
		t.Errorf("left behind: %v, %v", left, err)
	}
	leave(t, s)
}

func content(t *testing.T, path string) []byte {
	t.Helper()
	b, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	return b
}

func TestReplaceWith(t *testing.T) {
	folder := t.TempDir()
	name := func(s string) string { return filepath.Join(folder, s) }
	write := func(s string) {
		t.Helper()
		if err := os.WriteFile(name(s), []byte(s), 0o600); err != nil {
			t.Fatal(err)
		}
	}
	write("old")
	write("new")
	write("taken")
	if err := ReplaceWith(name("new"), name("old"), name("taken")); !errors.Is(err, fs.ErrExist) {
		t.Errorf("aside was taken: %v", err)
	}
	if got := string(content(t, name("old"))); got != "old" {
		t.Errorf("it was replaced all the same by %q", got)
	}
	if err := ReplaceWith(name("new"), name("old"), name("aside")); err != nil {
		t.Fatal(err)
	}
	if a, b := string(content(t, name("old"))), string(content(t, name("aside"))); a != "new" || b != "old" {
		t.Errorf("in place is %q, aside %q", a, b)
	}
	write("new")
	if err := ReplaceWith(name("new"), name("none"), name("aside2")); err != nil || string(content(t, name("none"))) != "new" {
		t.Errorf("where nothing was: %v", err)
	}
}
