package main

import (
	"fmt"
	"os"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"

	"tailbell/config"
)

const seriesSetup = `name = "quillmere"
folder = "data"
partitions = 2
[time]
mode = "history"
[[indicator]]
name = "fall"
noun = "falls"
series = ["quillmere-*/*/fall"]
sums = ["{site}/*/fall"]
unit = "bed-days"
every = "1d"
zone = "Europe/Berlin"
settle = "1d"
horizon = "120d"
windows = ["28d"]
p_limit = 0.001
quiet = 3
[indicator.baseline]
kind = "known"
rate = 0.005
`

// bedDays is a report of so many falls on a ward on a day of March 2026.
func bedDays(ward string, day, falls int) string {
	zone, err := time.LoadLocation("Europe/Berlin")
	if err != nil {
		panic(err) // it is embedded
	}
	start := time.Date(2026, 3, day, 0, 0, 0, 0, zone)
	return fmt.Sprintf(`{"series":"%s/fall","start":"%s","end":"%s","events":%d,"exposure":20}`,
		ward, start.Format(time.RFC3339), start.AddDate(0, 0, 1).Format(time.RFC3339), falls)
}

// TestSeriesCommands runs the tasks of a programme from the command line, against
// a daemon of two partitions.
func TestSeriesCommands(t *testing.T) {
	path := filepath.Join(t.TempDir(), "tailbell.toml")
	if err := os.WriteFile(path, []byte(seriesSetup), 0o600); err != nil {
		t.Fatal(err)
	}
	s := newService(t, path)
	s.says(1, []string{"nothing has run yet"}, "series", "list")
	s.start()
	var lines []string
	for day := 1; day <= 40; day++ {
		falls := 0
		if day >= 30 {
			falls = 2
		}
		lines = append(lines, bedDays("quillmere-east/ward-3", day, falls), bedDays("quillmere-east/ward-4", day, 0), bedDays("quillmere-north/ward-1", day, 0))
	}
	s.feeds(lines)
	by := func(args ...string) []string { return append(append([]string{"series"}, args...), "--by", "A. Nurse") }
	list := s.says(0, []string{"quillmere-east/*/fall (sum of 2)", "quillmere-east/ward-3/fall", "quillmere-north/ward-1/fall"}, "series", "list")
	t.Log("\n" + list)
	alerts := s.says(0, []string{"quillmere-east/*/fall", "quillmere-east/ward-3/fall"}, "alert", "list")
	t.Log("\n" + alerts)
	s.says(2, []string{"--why is missing"}, by("reset", "quillmere-east/ward-3/fall", "--from", "2026-04-08")...)
	s.says(2, []string{"--from is missing"}, by("reset", "quillmere-east/ward-3/fall", "--why", "w")...)
	s.says(2, []string{"write a date in Europe/Berlin"}, by("reset", "quillmere-east/ward-3/fall", "--why", "w", "--from", "8.4.2026")...)
	s.says(2, []string{"no indicator monitors"}, by("reset", "quillmere-east/ward-3/error", "--why", "w", "--from", "2026-04-08")...)
	s.says(1, []string{"no_such_series"}, by("reset", "quillmere-east/ward-9/fall", "--why", "w", "--from", "2026-04-08")...)
	t.Log(s.says(0, []string{"begin again from 2026-04-08; alert ", " of quillmere-east/ward-3/fall has returned with it."}, by("reset", "quillmere-east/ward-3/fall", "--from", "2026-04-08", "--why", "cluster closed")...))
	s.says(1, []string{"said already"}, by("reset", "quillmere-east/ward-3/fall", "--from", "2026-04-08", "--why", "again")...)
	t.Log(s.says(0, []string{"quillmere-*/*/fall (5 series): case definition from 2026-05-01 recorded"},
		by("change", "quillmere-*/*/fall", "--what", "case definition", "--from", "2026-05-01", "--why", "chairs count too")...))
	t.Log(s.says(0, []string{"out of service from 2026-04-10 to 2026-04-20"},
		by("out-of-service", "quillmere-north/*/fall", "--from", "2026-04-10", "--until", "2026-04-20", "--why", "drill")...))
	t.Log(s.says(0, []string{"out of service from 2026-04-22 to 2026-04-25."},
		by("out-of-service", "quillmere-north/*/fall", "--from", "2026-04-22", "--for", "3d", "--why", "another drill")...))
	t.Log(s.says(0, []string{"back in service from 2026-04-15"}, by("back-in-service", "quillmere-north/*/fall", "--from", "2026-04-15")...))
	t.Log(s.says(0, []string{"events and exposure of 2026-03 signed off"}, by("sign-off", "quillmere-*/*/fall", "--month", "2026-03")...))
	t.Log(s.says(0, []string{"closing from 2026-04-12 recorded"},
		by("change", "quillmere-east/ward-4/fall", "--what", "closing", "--from", "2026-04-12", "--why", "moves to ward 5")...))
	t.Log(s.says(0, []string{"opening from 2026-04-12 recorded"},
		by("change", "quillmere-east/ward-5/fall", "--what", "opening", "--from", "2026-04-12", "--why", "takes over from ward 4")...))
	list = s.says(0, []string{"before 2026-04-01", "2026-04-08 reset: cluster closed (A. Nurse)", "2026-05-01 change of case definition", "not yet open", "quillmere-east/*/fall (sum of 3)", "until 2026-04-15"}, "series", "list")
	t.Log("\n" + list)
	s.says(2, []string{"into belongs"}, by("change", "quillmere-north/ward-1/fall", "--what", "renamed", "--from", "2026-05-01", "--why", "w")...)
	t.Log(s.says(0, []string{"renamed into quillmere-north/stroke-unit/fall from 2026-05-01 recorded"},
		by("change", "quillmere-north/ward-1/fall", "--what", "renamed", "--into", "quillmere-north/stroke-unit/fall", "--from", "2026-05-01", "--why", "new name")...))
	s.says(0, []string{"not yet open", "in the place of quillmere-north/ward-1/fall: new name (A. Nurse)"}, "series", "list", "quillmere-north/stroke-unit/*")
	shown := s.says(0, []string{"returned"}, "alert", "list", "--series", "quillmere-east/ward-3/fall")
	t.Log("\n" + shown)
	var tail []string
	for day := 41; day <= 43; day++ {
		tail = append(tail, bedDays("quillmere-east/ward-3", day, 0), bedDays("quillmere-north/ward-1", day, 0))
	}
	tail = append(tail, bedDays("quillmere-east/ward-4", 44, 1))
	s.feeds(tail)
	s.says(0, []string{"series_closed"}, "refused", "list", "--partition", strconv.Itoa(config.PartitionOf("quillmere-east/ward-4/fall", 1, 2)))
	t.Log("\n" + s.says(0, []string{"out of service"}, "status"))
	t.Log("\n" + s.says(0, []string{`"condition": "out of service"`}, "series", "list", "quillmere-north/**", "--json"))
	for line := range strings.SplitSeq(alerts, "\n") {
		if id, rest, _ := strings.Cut(line, " "); strings.Contains(rest, "quillmere-east/*/fall") {
			t.Log("\n" + s.says(0, []string{"all together", "Carried by Ward 3"}, "alert", "show", id))
		}
	}
}

// feeds feeds lines to the daemon, each to its partition, and waits until they
// are counted.
func (s *service) feeds(lines []string) {
	s.t.Helper()
	file := filepath.Join(s.t.TempDir(), "history.ndjson")
	if err := os.WriteFile(file, []byte(strings.Join(lines, "\n")), 0o600); err != nil {
		s.t.Fatal(err)
	}
	s.says(0, nil, "feed", file)
	s.await("all that was fed", func() bool {
		r, ok := s.status()
		return ok && !slices.ContainsFunc(r.Partitions, func(p partStatus) bool { return p.Position < p.End })
	})
}
