package main

import (
	"encoding/csv"
	"encoding/json"
	"fmt"
	"os"
	"path/filepath"
	"regexp"
	"slices"
	"strings"
	"syscall"
	"testing"
	"time"

	"tailbell/alert/outlet"
	"tailbell/monitor/life"
)

const bellScript = `#!/bin/sh
cd "$(dirname "$0")"
if [ -e broken ]; then cat >/dev/null; echo "no bell" >&2; exit 1; fi
n=1; until mkdir "n.$n" 2>/dev/null; do n=$((n+1)); done
cat > "part.$n" && mv "part.$n" "rang.$(printf %04d $n)"
`

// handled is a daemon in history time with a command for an outlet.
type handled struct {
	*service
	folder string
	day    int
}

func newHandled(t *testing.T) *handled {
	t.Helper()
	folder := t.TempDir()
	if err := os.WriteFile(filepath.Join(folder, "bell"), []byte(bellScript), 0o700); err != nil { //nolint:gosec // it is a program
		t.Fatal(err)
	}
	setup := filepath.Join(folder, "tailbell.toml")
	text := `name = "quillmere"
folder = "data"
[time]
mode = "history"
[[outlet]]
name = "bell"
kind = "command"
command = ["./bell"]
history = true
[[indicator]]
name = "fall"
noun = "falls"
series = ["*/*/fall"]
unit = "bed-days"
per = 1000
every = "1d"
settle = "0s"
windows = ["7d"]
quiet = 5
[indicator.baseline]
kind = "known"
rate = 10
`
	if err := os.WriteFile(setup, []byte(text), 0o600); err != nil {
		t.Fatal(err)
	}
	return &handled{newService(t, setup), folder, 0}
}

// days publishes days with so many falls on each of the wards.
func (h *handled) days(n, falls int, wards ...string) {
	h.t.Helper()
	var data []string
	for range n {
		from := time.Date(2026, 3, 1+h.day, 0, 0, 0, 0, time.UTC)
		for _, ward := range wards {
			data = append(data, fmt.Sprintf(`{"series":"quillmere-east/%s/fall","start":%q,"end":%q,"events":%d,"exposure":20}`,
				ward, from.Format(time.RFC3339), from.AddDate(0, 0, 1).Format(time.RFC3339), falls))
		}
		h.day++
	}
	position := h.publish(data...)
	h.await("read", func() bool {
		s, ok := h.status()
		return ok && s.Partitions[0].Position >= position
	})
}

// command runs a command that must succeed and say something.
func (h *handled) command(want string, args ...string) string {
	h.t.Helper()
	code, out, stderr := run(h.t, append(args, "--config", h.path)...)
	if code != 0 || !strings.Contains(out, want) {
		h.t.Fatalf("%v: exit code %d\n%s%s", args, code, out, stderr)
	}
	return out
}

func (h *handled) alerts() []life.Record {
	h.t.Helper()
	var records []life.Record
	if err := json.Unmarshal([]byte(h.command("", "alert", "list", "--all", "--json")), &records); err != nil {
		h.t.Fatal(err)
	}
	return records
}

// rang is what the command was told, in order.
func (h *handled) rang() []outlet.Errand {
	h.t.Helper()
	files, err := filepath.Glob(filepath.Join(h.folder, "rang.*"))
	if err != nil {
		h.t.Fatal(err)
	}
	var all []outlet.Errand
	for _, f := range files {
		data, err := os.ReadFile(f)
		if err != nil {
			h.t.Fatal(err)
		}
		var e outlet.Errand
		if err := json.Unmarshal(data, &e); err != nil {
			h.t.Fatalf("%v: %s", err, data)
		}
		all = append(all, e)
	}
	return all
}

// TestHandling follows an alert through the shelf and through an outlet that
// refuses a step, by commands alone, and exports its whole record.
func TestHandling(t *testing.T) {
	h := newHandled(t)
	h.start()
	h.command("took the test", "outlet", "try", "bell")
	if got := h.rang(); len(got) != 1 || !got[0].Test || !strings.Contains(got[0].Text, "This is a test") {
		t.Fatalf("the test arrived as %+v", got)
	}
	h.days(10, 1, "ward-1", "ward-2", "ward-3") // three wards ring at once: one notice
	h.await("the bell", func() bool { return len(h.rang()) == 2 })
	if got := h.rang()[1]; len(got.Notices) != 3 || !strings.Contains(got.Subject, "3 series of fall") || !strings.Contains(got.Text, "Ward 2, Quillmere East") {
		t.Errorf("three wards arrived as %q, %d notices:\n%s", got.Subject, len(got.Notices), got.Text)
	}
	records := h.alerts()
	id := records[slices.IndexFunc(records, func(r life.Record) bool { return strings.Contains(r.Series, "ward-1") })].ID
	if code, _, stderr := run(t, "alert", "shelve", id, "--by", "A. Nurse", "--why", "known", "--config", h.path); code != 2 || !strings.Contains(stderr, "--until is missing") {
		t.Errorf("a shelf without an end: exit code %d, %s", code, stderr)
	}
	h.command("is shelved until 2026-03-13", "alert", "shelve", id, "--for", "60h", "--by", "A. Nurse", "--why", "known")
	h.command("SHELVED until", "alert", "show", id)
	h.command("Noted", "alert", "note", id, "--by", "A. Nurse", "--why", "=on the shelf")
	h.days(4, 2, "ward-1")
	h.command("off the shelf: the time is over", "alert", "show", id)
	h.await("the bell again", func() bool {
		return slices.ContainsFunc(h.rang(), func(e outlet.Errand) bool { return strings.Contains(e.Text, "OFF THE SHELF") })
	})
	for _, e := range h.rang() {
		for _, n := range e.Notices {
			if n.Quiet() || n.Step.Why == "=on the shelf" {
				t.Errorf("the bell was told of step %s, which was on the shelf", n.Key)
			}
		}
	}
	h.refuse(id)
	h.exported(id)
}

// TestActsTellWhatStands sees that what a command answers is the record as it
// stands after the act, and what closing an alert that signals means.
func TestActsTellWhatStands(t *testing.T) {
	h := newHandled(t)
	h.start()
	h.days(10, 1, "ward-1")
	records := h.alerts()
	if len(records) != 1 {
		t.Fatalf("%d alerts", len(records))
	}
	id := records[0].ID
	who := []string{"--by", "A. Nurse", "--why", "known"}
	act := func(want, kind string, more ...string) {
		t.Helper()
		h.command(want, append(append([]string{"alert", kind, id}, who...), more...)...)
	}
	act("is shelved until 2026-03-31 00:00 UTC.", "shelve", "--until", "2026-03-31")
	act("is now unacknowledged.", "unshelve")
	act("is marked chance", "mark", "--as", "chance")
	act("has no mark any more (unacknowledged).", "mark", "--as", "none")
	act("is shelved until", "shelve", "--for", "60h")
	act("is now unacknowledged.", "unshelve")
	says(t, 1, []string{"alert " + id + " is unacknowledged and can't be unshelved"}, append([]string{"alert", "unshelve", id, "--config", h.path}, who...)...)
	says(t, 2, []string{"must be one of real, chance, data error, change of definition, or none"}, append([]string{"alert", "mark", id, "--as", "fake"}, who...)...)
	says(t, 2, []string{"--for 0d: it must be longer than nothing"}, append([]string{"alert", "shelve", id, "--for", "0d"}, who...)...)
	h.command(id, "alert", "list", "--series", "*/ward-1/*")
	h.command("No alerts of series that match */ward-2/*.", "alert", "list", "--series", "*/ward-2/*")
	act("is now closed. It still signals: no other alert of quillmere-east/ward-1/fall opens in this direction before 5 looks in a row are quiet.", "close")
	h.days(3, 1, "ward-1")
	if records := h.alerts(); len(records) != 1 {
		t.Errorf("another alert opened while the closed one's run lasts: %d", len(records))
	}
	h.stop(syscall.SIGTERM) // a bell that outlived a killed daemon would still write
}

// bell is how the outlet is doing.
func (h *handled) bell() outletState {
	h.t.Helper()
	var states []outletState
	if err := json.Unmarshal([]byte(h.command("", "outlet", "list", "--json")), &states); err != nil {
		h.t.Fatal(err)
	}
	return states[slices.IndexFunc(states, func(s outletState) bool { return s.Name == "bell" })]
}

// refuse lets the bell refuse a step, which a person then lets go.
func (h *handled) refuse(id string) {
	h.t.Helper()
	h.await("all delivered", func() bool { return h.bell().Waiting == 0 })
	broken := filepath.Join(h.folder, "broken")
	if err := os.WriteFile(broken, nil, 0o600); err != nil {
		h.t.Fatal(err)
	}
	h.command("acknowledged", "alert", "acknowledge", id, "--by", "B. Doctor")
	h.await("a failure", func() bool { return h.bell().Tries > 0 })
	bell := h.bell()
	if bell.Kind != "command" || bell.Waiting != 1 || !strings.HasPrefix(bell.First, id) || !strings.Contains(bell.Error, "no bell") || bell.Next == nil {
		h.t.Errorf("the bell: %+v", bell)
	}
	if code, _, stderr := run(h.t, "outlet", "try", "bell", "--config", h.path); code != 1 || !strings.Contains(stderr, "no bell") {
		h.t.Errorf("trying a broken bell: exit code %d, %s", code, stderr)
	}
	h.command("will not be told", "outlet", "skip", "bell", bell.First)
	if code, _, stderr := run(h.t, "outlet", "skip", "bell", bell.First, "--config", h.path); code != 1 || !strings.Contains(stderr, "waits for an outlet") {
		h.t.Errorf("letting it go twice: exit code %d, %s", code, stderr)
	}
	h.await("the bell is well", func() bool { return h.bell().Tries == 0 })
	list := h.command("PASSED OVER", "outlet", "list")
	if after := h.bell(); after.Skipped != 1 || after.Waiting != 0 || after.Delivered == 0 || after.PassedOver == 0 ||
		!regexp.MustCompile(fmt.Sprintf(`bell +command +%d +%d +0 +1\n`, after.Delivered, after.PassedOver)).MatchString(list) {
		h.t.Errorf("the bell, mended: %+v\n%s", after, list)
	}
}

// exported holds the export against the records, with the daemon and without.
func (h *handled) exported(id string) {
	h.t.Helper()
	text := h.command("", "alert", "export")
	asJSON := h.command("", "alert", "export", "--format", "json")
	h.stop(syscall.SIGTERM)
	if h.command("", "alert", "export") != text || h.command("", "alert", "export", "--format", "json") != asJSON {
		h.t.Error("without the daemon the export is another one")
	}
	var records []life.Record
	if err := json.Unmarshal([]byte(asJSON), &records); err != nil || len(records) != 3 {
		h.t.Fatalf("%d records, %v", len(records), err)
	}
	rows, err := csv.NewReader(strings.NewReader(text)).ReadAll()
	if err != nil {
		h.t.Fatal(err)
	}
	steps := 0
	for _, r := range records {
		steps += len(r.Steps)
	}
	if len(rows) != steps+1 {
		h.t.Errorf("%d lines of %d steps", len(rows)-1, steps)
	}
	var kinds []string
	for _, row := range rows[1:] {
		if row[0] == id {
			kinds = append(kinds, row[10]+"/"+row[13]+"/"+row[14]+"/"+row[16])
		}
	}
	for _, want := range []string{
		"opened///", "shelved/A. Nurse/known/2026-03-13T12:00:00Z", "note/A. Nurse/'=on the shelf/", "unshelved//the time is over/", "acknowledged/B. Doctor//",
	} {
		if !slices.Contains(kinds, want) {
			h.t.Errorf("the export lacks %q: %q", want, kinds)
		}
	}
}
