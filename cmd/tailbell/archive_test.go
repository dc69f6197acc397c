package main

import (
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"
)

const archiveSetup = `name = "quillmere"
folder = "data"
[time]
mode = "history"
[limits]
max_series = 100
archive = "30d"
[[indicator]]
name = "fall"
noun = "falls"
series = ["quillmere-east/*/fall"]
unit = "bed-days"
every = "1d"
zone = "Europe/Berlin"
settle = "1h"
horizon = "3d"
windows = ["7d"]
p_limit = 0.001
[indicator.baseline]
kind = "known"
rate = 0.01
`

// The archive of a daemon reaches back as far as the set-up says; what was let go
// is counted, and whatever is made from the store says where it begins.
func TestArchiveOfADaemon(t *testing.T) {
	path := filepath.Join(t.TempDir(), "tailbell.toml")
	if err := os.WriteFile(path, []byte(archiveSetup), 0o600); err != nil {
		t.Fatal(err)
	}
	var b strings.Builder
	b.WriteString("series,start,end,events,exposure\n")
	begin := time.Date(2026, 1, 1, 0, 0, 0, 0, time.UTC)
	for day := range 150 {
		for ward := range 2 {
			fmt.Fprintf(&b, "quillmere-east/ward-%d/fall,%s,%s,%d,22\n", ward, begin.AddDate(0, 0, day).Format(time.DateOnly), begin.AddDate(0, 0, day+1).Format(time.DateOnly), day%3/2)
		}
	}
	file := filepath.Join(t.TempDir(), "falls.csv")
	if err := os.WriteFile(file, []byte(b.String()), 0o600); err != nil {
		t.Fatal(err)
	}
	s := newService(t, path)
	s.start()
	s.says(0, []string{"300 observations"}, "feed", file, "--zone", "Europe/Berlin")
	s.await("the counts", func() bool {
		r, ok := s.status()
		return ok && r.Partitions[0].Position == r.Partitions[0].End
	})
	t.Log("\n" + s.says(0, []string{"archive: ", " since 2026-04-30 (UTC); before, ", " were let go, from 2025-12-31 on"}, "status"))
	r, _ := s.status()
	a := r.Partitions[0].Archive
	// 150 days, of which 30 and those in memory are left.
	if a.LetGo != 2*120 || a.Slots == 0 || a.Slots > 2*30 || a.From.Format(time.DateOnly) != "2026-04-30" {
		t.Errorf("%+v", a)
	}
	shorter := filepath.Join(filepath.Dir(path), "shorter.toml")
	if err := os.WriteFile(shorter, []byte(strings.Replace(archiveSetup, "30d", "20d", 1)), 0o600); err != nil {
		t.Fatal(err)
	}
	s.says(0, []string{"limits.archive: 30d -> 20d: what began longer ago is let go at once and for good"}, "config", "diff", shorter)
	s.stop(os.Interrupt)
	code, out, complaint := run(t, "store", "check", filepath.Join(filepath.Dir(path), "data"))
	if t.Log(out); code != 0 || !strings.Contains(out, "slots since 2026-04-30 (UTC); before, 240 slots were let go, from 2025-12-31 on") {
		t.Errorf("store check: %d %s %s", code, out, complaint)
	}
	text := filepath.Join(t.TempDir(), "report.md")
	s.says(0, nil, "report", "--markdown", text, "--resamples", "0")
	if b, err := os.ReadFile(text); err != nil || strings.Count(string(b), "before, 240 slots were let go") != 2 {
		t.Errorf("%v: the report does not say where its history begins:\n%s", err, b)
	}
	s.says(0, []string{"What was let go is in none of these figures"}, "baseline", "--resamples", "100")
}
