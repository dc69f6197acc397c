package main

import (
	"bufio"
	"bytes"
	"context"
	"fmt"
	"io"
	"os"
	"path/filepath"
	"regexp"
	"strings"
	"testing"
	"time"
)

// startDaemon runs the daemon of a set-up in this process until the test ends.
// It returns once the daemon is live.
func startDaemon(t *testing.T, setup string) {
	t.Helper()
	ctx, stop := context.WithCancel(context.Background())
	log, write := io.Pipe()
	ended := make(chan int, 1)
	go func() {
		code := execute(ctx, []string{"run", "--config", setup, "--health", "off"}, strings.NewReader(""), io.Discard, write)
		ended <- code
		if err := write.Close(); err != nil {
			t.Error(err)
		}
	}()
	lines := bufio.NewScanner(log)
	said := ""
	for lines.Scan() {
		if said += lines.Text() + "\n"; strings.Contains(lines.Text(), `"message":"live"`) {
			break
		}
	}
	go func() {
		if _, err := io.Copy(io.Discard, log); err != nil {
			t.Error(err)
		}
	}()
	t.Cleanup(func() {
		stop()
		if code := <-ended; code != 0 {
			t.Errorf("the daemon ended with %d\n%s", code, said)
		}
	})
}

// falls writes so many days of counts, from so many days ago on.
func falls(t *testing.T, series string, ago, days int) string {
	t.Helper()
	var b bytes.Buffer
	b.WriteString("series,start,end,events,exposure[bed-days]\n")
	first := time.Now().UTC().Truncate(24*time.Hour).AddDate(0, 0, -ago)
	for i := range days {
		day := first.AddDate(0, 0, i)
		fmt.Fprintf(&b, "%s,%s,%s,1,20\n", series, day.Format(time.RFC3339), day.AddDate(0, 0, 1).Format(time.RFC3339))
	}
	path := filepath.Join(t.TempDir(), "falls.csv")
	if err := os.WriteFile(path, b.Bytes(), 0o600); err != nil {
		t.Fatal(err)
	}
	return path
}

func says(t *testing.T, want int, parts []string, args ...string) string {
	t.Helper()
	code, stdout, stderr := run(t, args...)
	if code != want {
		t.Errorf("%v: exit code %d\n%s%s", args, code, stdout, stderr)
	}
	for _, part := range parts {
		if !strings.Contains(stdout+stderr, part) {
			t.Errorf("%v does not say %q:\n%s%s", args, part, stdout, stderr)
		}
	}
	return stdout
}

// TestFeedTellsWhatBecameOfTheRows feeds a running daemon, and acts on what it
// finds.
func TestFeedTellsWhatBecameOfTheRows(t *testing.T) {
	setup := wardSetup(t)
	ward := falls(t, "quillmere-east/ward-1/fall", 25, 20)
	startDaemon(t, setup)
	says(t, 0, []string{"20 rows in 1 file: 20 observations published (to the running daemon), 0 not usable.", "The daemon has read them: 20 counted."},
		"feed", "--config", setup, ward)
	says(t, 0, []string{"The daemon has read them: 0 counted, 20 repeats."}, "feed", "--config", setup, ward)
	says(t, 0, []string{"1 row is of no indicator, so nothing monitors them: quillmere-east/ward-1/slip (1 row).", "0 counted, 1 unmonitored"},
		"feed", "--config", setup, falls(t, "quillmere-east/ward-1/slip", 5, 1))
	says(t, 0, []string{"0 counted, 1 refused. tailbell refused list says why."},
		"feed", "--config", setup, falls(t, "quillmere-east/ward-1/fall", 60, 1))
	says(t, 0, []string{"data   beyond_horizon     quillmere-east/ward-1/fall: its slot ended"}, "refused", "list", "--config", setup)
	says(t, 0, []string{"tailbell refused list says what was refused", "outlet bus: ", "20 repeats"}, "status", "--config", setup)
	says(t, 0, []string{`"conditions": [`, `"waiting": 0`}, "status", "--json", "--config", setup)

	list := says(t, 0, []string{"WINDOW", "  7d  "}, "alert", "list", "--config", setup)
	alert := strings.Fields(strings.Split(list, "\n")[1])[0]
	says(t, 0, []string{"Noted on alert " + alert + " (unacknowledged)."},
		"alert", "note", alert, "--by", "B. Ostrander", "--why", "line set", "--config", setup)
	says(t, 0, []string{"Alert " + alert + " is now closed."},
		"alert", "close", alert, "--by", "B. Ostrander", "--why", "a register error", "--config", setup)
	says(t, 1, []string{"alert " + alert + " is closed already"}, "alert", "acknowledge", alert, "--by", "B. Ostrander", "--config", setup)
	shown := says(t, 0, nil, "alert", "show", alert, "--config", setup)
	if strings.HasSuffix(shown, "\n\n") {
		t.Error("the record ends in an empty line")
	}
}

// TestFeedLeavesTheSetupInForce sees that only the first feeding puts a set-up
// into force, and that rows which another one would count otherwise are refused.
func TestFeedLeavesTheSetupInForce(t *testing.T) {
	setup := wardSetup(t)
	ward := falls(t, "quillmere-east/ward-1/fall", 25, 3)
	says(t, 0, []string{"3 rows in 1 file: 3 observations published (no daemon runs: they wait in the stream)"}, "feed", "--config", setup, ward)
	says(t, 0, []string{"Another set-up is in force"}, "feed", "--config", edited(t, setup, "quiet.toml", "quiet = 3", "quiet = 4"), ward)
	unit := edited(t, setup, "days.toml", "bed-days", "patient-days")
	slip := edited(t, setup, "slip.toml", "/fall", "/slip")
	says(t, 1, []string{"Nothing was fed", "quillmere-east/ward-1/slip (1 row)"}, "feed", "--config", slip, falls(t, "quillmere-east/ward-1/slip", 5, 1))
	says(t, 1, []string{"the file states exposure in bed-days"}, "feed", "--config", unit, ward)

	startDaemon(t, setup)
	status := says(t, 0, nil, "status", "--config", setup)
	if !strings.Contains(status, "set-up version 1") || !strings.Contains(status, "6 elements: 3 counted, 0 withheld, 3 repeats") {
		t.Errorf("the stream holds something else:\n%s", status)
	}
}

func TestUntil(t *testing.T) {
	setup := wardSetup(t)
	ward := falls(t, "quillmere-east/ward-1/fall", 25, 10)
	due := regexp.MustCompile(`(\d+) looks? made when due`)
	looks := func(options ...string) string {
		said := says(t, 0, nil, append([]string{"replay", "--config", setup, ward}, options...)...)
		return due.FindStringSubmatch(said)[1]
	}
	day := func(ago int) string { return time.Now().UTC().AddDate(0, 0, -ago).Format(time.DateOnly) }
	// Ten days give four full windows; the last is due a day after its end.
	if without, with := looks(), looks("--zone", "UTC", "--until", day(14)); without != "3" || with != "4" {
		t.Errorf("%s looks; until a day later %s", without, with)
	}
	says(t, 2, []string{"lies before", "falls.csv:11"}, "replay", "--config", setup, ward, "--zone", "UTC", "--until", day(20))
	says(t, 2, []string{"--until", "--zone"}, "replay", "--config", setup, ward, "--until", day(14)+"T00:00")
	says(t, 2, []string{"--until " + day(-2) + " lies in the future"}, "feed", "--config", setup, ward, "--zone", "UTC", "--until", day(-2))

	says(t, 0, nil, "feed", "--config", edited(t, setup, "history.toml", "[[indicator]]", "[time]\nmode = \"history\"\n[[indicator]]"),
		ward, "--zone", "UTC", "--until", day(14))
}
