package main

import (
	"bytes"
	"encoding/json"
	"errors"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"tailbell/monitor"
	"tailbell/monitor/store"
)

// runStore runs "tailbell store" and returns its exit code and output.
func runStore(t *testing.T, args ...string) (int, string) {
	t.Helper()
	var out bytes.Buffer
	code := execute(t.Context(), append([]string{"store"}, args...), strings.NewReader(""), &out, &out)
	return code, out.String()
}

// makeStore makes the closed store of one of two partitions.
func makeStore(t *testing.T, folder string, partition int) string {
	t.Helper()
	path := filepath.Join(folder, []string{"partition-0.store", "partition-1.store"}[partition])
	s, err := store.Create(path, store.Identity{Deployment: "quillmere", Partition: partition, Partitions: 2, KeyParts: 1}, store.Options{})
	if err != nil {
		t.Fatal(err)
	}
	if err := errors.Join(s.Commit(monitor.Changes{Position: 42, Header: []byte("h")}, store.Mark{}), s.Close()); err != nil {
		t.Fatal(err)
	}
	return path
}

func TestStoreCheckAndCopy(t *testing.T) {
	folder := filepath.Join(t.TempDir(), "a[1]*")
	first := makeStore(t, folder, 0)
	makeStore(t, folder, 1)

	code, out := runStore(t, "check", folder)
	if code != 0 || strings.Count(out, "is sound") != 2 || !strings.Contains(out, `deployment "quillmere", partition 1 of 2`) ||
		!strings.Contains(out, "position 42 of its stream after 1 commit\n") {
		t.Errorf("check gave %d:\n%s", code, out)
	}
	code, out = runStore(t, "check", "--json", first)
	var finding storeFinding
	if err := json.Unmarshal([]byte(out), &finding); err != nil || code != 0 || !finding.Sound || finding.Report.Position != 42 {
		t.Errorf("check --json gave %d, %v:\n%s", code, err, out)
	}

	to := filepath.Join(t.TempDir(), "copies")
	if code, out = runStore(t, "copy", folder, to); code != 0 || strings.Count(out, "at position 42") != 2 {
		t.Errorf("copy gave %d:\n%s", code, out)
	}
	if code, out = runStore(t, "check", to); code != 0 || strings.Count(out, "is sound") != 2 {
		t.Errorf("check of the copies gave %d:\n%s", code, out)
	}
	if code, out = runStore(t, "copy", folder, to); code != 1 || !strings.Contains(out, "exists") {
		t.Errorf("a second copy gave %d:\n%s", code, out)
	}
}

func TestStoreCheckNamesDamage(t *testing.T) {
	path := makeStore(t, t.TempDir(), 0)
	b, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	at := bytes.LastIndex(b, []byte(`"position":42`))
	b[at+11]++
	if err := os.WriteFile(path, b, 0o600); err != nil {
		t.Fatal(err)
	}
	code, out := runStore(t, "check", path)
	if code != 1 || !strings.Contains(out, "is damaged") || !strings.Contains(out, "checksum") {
		t.Errorf("a flipped byte gave %d:\n%s", code, out)
	}
	if err := os.Truncate(path, 8192); err != nil {
		t.Fatal(err)
	}
	if code, out = runStore(t, "check", path); code != 1 || !strings.Contains(out, "cut off") {
		t.Errorf("a truncated file gave %d:\n%s", code, out)
	}
	if code, out = runStore(t, "check", t.TempDir()); code != 1 || !strings.Contains(out, "no stores") {
		t.Errorf("an empty folder gave %d:\n%s", code, out)
	}
	if code, out = runStore(t, "check"); code == 0 {
		t.Errorf("no argument gave %d:\n%s", code, out)
	}
}

func TestStoreCheckLeavesAnOpenStoreAlone(t *testing.T) {
	path := makeStore(t, t.TempDir(), 0)
	s, err := store.Open(path, store.Identity{Deployment: "quillmere", Partition: 0, Partitions: 2, KeyParts: 1}, store.Options{})
	if err != nil {
		t.Fatal(err)
	}
	code, out := runStore(t, "check", path)
	if code != 1 || !strings.Contains(out, "in use") {
		t.Errorf("an open store gave %d:\n%s", code, out)
	}
	if err := s.Close(); err != nil {
		t.Fatal(err)
	}
}
