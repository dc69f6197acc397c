package main

import (
	"bytes"
	"encoding/json"
	"errors"
	"os"
	"path/filepath"
	"strings"
	"syscall"
	"testing"

	"github.com/google/go-cmp/cmp"

	"tailbell/ingest/bus"
	"tailbell/ingest/control"
)

// account is what a rebuilt store must have in common with the lost one.
func (s *service) account(position uint64) string {
	s.t.Helper()
	r := s.reaches(position)
	p := r.Partitions[0]
	text, err := json.MarshalIndent(p.Account, "", " ")
	if err != nil {
		s.t.Fatal(err)
	}
	_, alerts, _ := run(s.t, "alert", "list", "--all", "--json", "--config", s.path)
	return string(text) + alerts
}

// TestRebuild loses a store and comes back by a hot copy and the stream's tail.
func TestRebuild(t *testing.T) {
	setup := wardSetup(t)
	s := newService(t, setup)
	s.start()
	for ago := 25; ago > 15; ago-- {
		s.publish(day(1, ago, 1), day(2, ago, ago%2), `{"broken"`)
	}
	s.reaches(s.publish(day(3, 20, 0)))
	copies := filepath.Join(t.TempDir(), "copies")
	s.says(0, []string{"partition-0.store: ", "at position"}, "store", "copy", filepath.Dir(storeOf(t, setup)), copies)
	s.says(1, []string{"exists"}, "store", "copy", filepath.Dir(storeOf(t, setup)), copies)
	for ago := 15; ago > 3; ago-- {
		s.publish(day(1, ago, 2), day(2, ago, 0))
	}
	end := s.publish(`{"id":"w1-25","series":"quillmere-east/ward-1/fall","revision":1,"retracted":true}`)
	want := s.account(end)
	if !strings.Contains(want, "quillmere-east/ward-1/fall") {
		t.Errorf("there is no alert to compare: %s", want)
	}
	s.stop(syscall.SIGKILL)

	lost := readAll(t, storeOf(t, setup))
	if err := os.WriteFile(storeOf(t, setup), lost[:len(lost)/3], 0o600); err != nil {
		t.Fatal(err)
	}
	s.says(0, []string{"Partition 0 stands at position", "aside-1"}, "store", "rebuild", copies)
	if !bytes.Equal(readAll(t, storeOf(t, setup)+".aside-1"), lost[:len(lost)/3]) {
		t.Error("what stood in its place was not kept")
	}
	s.start()
	if diff := cmp.Diff(want, s.account(end)); diff != "" {
		t.Errorf("the rebuilt store differs (-lost +rebuilt):\n%s", diff)
	}
	s.stop(syscall.SIGTERM)

	// Nothing in place at all.
	if err := os.Remove(storeOf(t, setup)); err != nil {
		t.Fatal(err)
	}
	s.says(0, []string{"Partition 0 stands at position"}, "store", "rebuild", filepath.Join(copies, "partition-0.store"))
	s.start()
	if diff := cmp.Diff(want, s.account(end)); diff != "" {
		t.Errorf("the second time (-lost +rebuilt):\n%s", diff)
	}
	s.stop(syscall.SIGTERM)
}

// TestTrim trims the stream to a copy: from that one a store is rebuilt, from an
// older one it is not any more, and the set-up in force is still compared.
func TestTrim(t *testing.T) {
	setup := wardSetup(t)
	s := newService(t, setup)
	s.start()
	copies := t.TempDir()
	old, kept := filepath.Join(copies, "old.store"), filepath.Join(copies, "kept.store")
	s.reaches(s.publish(day(1, 9, 0)))
	s.says(0, nil, "store", "copy", storeOf(t, setup), old)
	for ago := 8; ago > 4; ago-- {
		s.publish(day(1, ago, 0))
	}
	s.reaches(s.publish(day(1, 4, 0)))
	s.says(0, nil, "store", "copy", storeOf(t, setup), kept)
	end := s.publish(day(1, 3, 0))
	want := s.reaches(end).Partitions[0].Account

	s.says(0, []string{"removed up to position", "begins at"}, "stream", "trim", old, kept)
	s.says(0, []string{"Nothing lies before", "begins at"}, "stream", "trim", copies)
	s.says(0, []string{"removed up to position"}, "stream", "trim", kept)
	s.says(1, []string{"no stores"}, "stream", "trim", t.TempDir())
	s.stop(syscall.SIGTERM)
	before := readAll(t, storeOf(t, setup))
	s.says(1, []string{"the stream begins at", "take a newer copy", "Nothing was changed"}, "store", "rebuild", old)
	if !bytes.Equal(before, readAll(t, storeOf(t, setup))) {
		t.Error("the refused rebuild changed the store")
	}
	other := edited(t, setup, "other.toml", `every = "1d"`, `every = "1h"`)
	if code, complaint := refusesToRun(t, other); code != 1 || !strings.Contains(complaint, "every") {
		t.Errorf("another set-up after the trim: exit code %d, %s", code, complaint)
	}
	s.says(0, nil, "store", "rebuild", kept)
	s.start()
	got := s.reaches(end).Partitions[0]
	if diff := cmp.Diff(want, got.Account); diff != "" {
		t.Errorf("rebuilt after the trim (-lost +rebuilt):\n%s", diff)
	}
	if st, ok := s.status(); !ok || len(st.Troubles) > 0 {
		t.Errorf("troubles: %+v", st.Troubles)
	}
	s.stop(syscall.SIGTERM)
}

// TestCopiesThatAreNotMade asks for copies where none may lie, and as somebody
// who can't write into the daemon's folder.
func TestCopiesThatAreNotMade(t *testing.T) {
	setup := wardSetup(t)
	s := newService(t, setup)
	s.start()
	s.reaches(s.publish(day(1, 9, 0)))
	folder := filepath.Dir(storeOf(t, setup))
	link := filepath.Join(t.TempDir(), "link")
	if err := os.Symlink(folder, link); err != nil {
		t.Fatal(err)
	}
	taken := filepath.Join(t.TempDir(), "taken")
	if err := os.WriteFile(taken, []byte("mine"), 0o600); err != nil {
		t.Fatal(err)
	}
	for to, says := range map[string]string{
		filepath.Join(folder, "partition-1.store"):    "own folder",
		filepath.Join(folder, "bus", "x"):             "own folder",
		filepath.Join(link, "x"):                      "own folder",
		filepath.Join(t.TempDir(), "none", "x.store"): "no such folder",
		taken: "exists already",
	} {
		s.says(1, []string{says}, "store", "copy", storeOf(t, setup), to)
	}
	if string(readAll(t, taken)) != "mine" {
		t.Error("a file was written over")
	}
	b, err := bus.Dial(t.Context(), s.setup())
	if err != nil {
		t.Fatal(err)
	}
	for _, name := range []string{"copy-1.request", "../copy-1.request", "/etc/copy-x.request", "control.json", "", "copy-*.request"} {
		var done bool
		if err := control.Call(t.Context(), b, verbCopy, name, &done); err == nil || done {
			t.Errorf("a copy was made by the request %q", name)
		}
	}
	if err := b.Close(); err != nil {
		t.Error(err)
	}
	left, err := filepath.Glob(filepath.Join(folder, "*.request"))
	if err != nil || len(left) > 0 {
		t.Errorf("left behind: %v, %v", left, err)
	}
	other := edited(t, setup, "other.toml", `"data"`, `"elsewhere"`)
	if code, _, complaint := run(t, "store", "copy", storeOf(t, setup), filepath.Join(t.TempDir(), "x"), "--config", other); code != 1 || !strings.Contains(complaint, "another folder") {
		t.Errorf("with another set-up: exit code %d, %s", code, complaint)
	}
	s.stop(syscall.SIGTERM)
}

// TestSetupOutlivesItsMessage removes the set-up's message from the stream, as its
// age would: another set-up that the store can't take is refused all the same.
func TestSetupOutlivesItsMessage(t *testing.T) {
	setup := wardSetup(t)
	s := newService(t, setup)
	s.start()
	end := s.reaches(s.publish(day(1, 9, 0))).Partitions[0].Position
	s.stop(syscall.SIGTERM)
	b, err := bus.Open(t.Context(), s.setup(), bus.WithoutListener())
	if err != nil {
		t.Fatal(err)
	}
	if err := errors.Join(b.Trim(t.Context(), end), b.Close()); err != nil {
		t.Fatal(err)
	}
	other := edited(t, setup, "other.toml", `every = "1d"`, `every = "1h"`)
	if code, complaint := refusesToRun(t, other); code != 1 || !strings.Contains(complaint, "can't follow the one in force") {
		t.Errorf("exit code %d, %s", code, complaint)
	}
	s.start()
	s.stop(syscall.SIGTERM)
}
