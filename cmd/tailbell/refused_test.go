package main

import (
	"encoding/json"
	"os"
	"strings"
	"syscall"
	"testing"

	"tailbell/ingest/bus"
)

// TestExportAndResend refuses data by the set-up's limits and by their text,
// exports them, and sends them again once the limits are wider.
func TestExportAndResend(t *testing.T) {
	setup := wardSetup(t)
	text := string(readAll(t, setup))
	narrow := strings.Replace(text, "[[indicator]]", "[limits]\nmax_series = 2\n[[indicator]]", 1)
	if err := os.WriteFile(setup, []byte(narrow), 0o600); err != nil {
		t.Fatal(err)
	}
	s := newService(t, setup)
	s.start()
	odd := "{\"series\":\"\xff\"}"
	s.reaches(s.publish(day(1, 5, 0), day(2, 5, 0), day(3, 5, 1), day(4, 5, 2), `{"series":"x","note":1}`, odd))

	lines := strings.Split(strings.TrimSpace(s.says(0, nil, "refused", "export")), "\n")
	if len(lines) != 4 {
		t.Fatalf("%d lines: %v", len(lines), lines)
	}
	var first, last exportedRefusal
	if err := json.Unmarshal([]byte(lines[0]), &first); err != nil || first.Original == nil || *first.Original != day(3, 5, 1) || first.Reason != "series_full" {
		t.Errorf("%v: %s", err, lines[0])
	}
	if err := json.Unmarshal([]byte(lines[3]), &last); err != nil || last.Original != nil || string(last.Base64) != odd {
		t.Errorf("%v: %s", err, lines[3])
	}
	if out := s.says(0, nil, "refused", "export", "--reason", "unknown_field"); strings.Count(out, "\n") != 1 {
		t.Errorf("by reason: %s", out)
	}
	s.says(1, []string{"1: sent again at position", "refused, series_full", "1 of 1 were refused again"}, "refused", "resend", "1")
	s.stop(syscall.SIGTERM)
	s.says(0, []string{"series_full"}, "refused", "export")
	s.says(1, []string{"no daemon"}, "refused", "resend", "1")

	if err := os.WriteFile(setup, []byte(strings.Replace(narrow, "max_series = 2", "max_series = 20", 1)), 0o600); err != nil {
		t.Fatal(err)
	}
	s.start()
	s.says(0, []string{"1: sent again at position", ": counted\n"}, "refused", "resend", "1")
	s.says(0, []string{"2: sent again", ": counted\n", "a repeat of what was counted already"}, "refused", "resend", "2", "1")
	s.says(1, []string{"3: sent again", "refused, unknown_field"}, "refused", "resend", "--reason", "unknown_field")
	s.says(1, []string{"4: sent again", "refused, not_utf8"}, "refused", "resend", "4")
	s.says(0, []string{"Nothing was refused for the reason too_big"}, "refused", "resend", "--reason", "too_big")
	s.says(1, []string{"there is no refusal 999"}, "refused", "resend", "999")
	s.says(2, []string{"name refusals by their numbers"}, "refused", "resend")
	s.says(2, []string{"name refusals by their numbers"}, "refused", "resend", "1", "--reason", "x")
	s.says(2, []string{`"x" is not the number`}, "refused", "resend", "x")
	r, ok := s.status()
	if a := r.Partitions[0].Account; !ok || a.Counted != 4 || a.Repeat != 1 || !a.Balanced() {
		t.Errorf("afterwards: %+v", a)
	}
	s.stop(syscall.SIGTERM)
}

// TestResendAct sends a refused act again, as an act.
func TestResendAct(t *testing.T) {
	setup := wardSetup(t)
	s := newService(t, setup)
	s.start()
	const act = `{"act":"note","alert":"none","by":"Ann Example","why":"seen"}`
	b := s.dial()
	position, err := b.Publish(t.Context(), bus.Outgoing{Kind: bus.Act, Data: []byte(act)})
	if err != nil {
		t.Fatal(err)
	}
	s.reaches(position)
	s.says(1, []string{"refused, no_such_alert"}, "refused", "resend", "1")
	s.stop(syscall.SIGTERM)
}
