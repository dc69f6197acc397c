package main

import (
	"os"
	"path/filepath"
	"strings"
	"testing"
)

// TestReport rehearses and reports on the coal data, twice to the same bytes.
func TestReport(t *testing.T) {
	folder := t.TempDir()
	rehearsal := filepath.Join(folder, "rehearsal.json")
	text := output(t, "rehearse", "--config", "../../testdata/coal/coal.toml", "--against", "../../testdata/coal/coal.toml",
		"--ratio", "0.3", "--length", "10y", "--histories", "20", "--years", "20", "--json")
	if err := os.WriteFile(rehearsal, []byte(text), 0o600); err != nil {
		t.Fatal(err)
	}
	var forms [2][2]string
	for i := range forms {
		html, markdown := filepath.Join(folder, "report.html"), filepath.Join(folder, "report.md")
		output(t, "report", "--config", "../../testdata/coal/coal.toml", "--rehearsal", rehearsal, "--resamples", "100", "--zone", "UTC",
			"--html", html, "--markdown", markdown, "../../testdata/coal/coal.csv")
		for j, path := range []string{html, markdown} {
			b, err := os.ReadFile(path)
			if err != nil {
				t.Fatal(err)
			}
			forms[i][j] = string(b)
		}
	}
	if forms[0] != forms[1] {
		t.Error("made twice, the report is not the same")
	}
	for _, form := range forms[0] {
		for _, want := range []string{
			"12 explosions in the 10 years to 31 December 1899", "A and B on the same planted histories", "Silence is no proof of safety",
			"tailbell report --config coal.toml --zone UTC --rehearsal rehearsal.json --seed 1 --resamples 100 --pictures 40 coal.csv",
		} {
			if !strings.Contains(form, want) {
				t.Errorf("the report lacks %q", want)
			}
		}
	}
	if bare := output(t, "report", "--config", "../../testdata/coal/coal.toml", "--resamples", "0", "--zone", "UTC", "../../testdata/coal/coal.csv"); !strings.HasPrefix(bare, "<!DOCTYPE html>") {
		t.Error("without --html there is none on standard output")
	}
}

// TestReportOfRefusedRows sees that rows which could not be used or were refused
// are named with their places, by those of the file whatever ticks were played
// between them, and that the exit code tells.
func TestReportOfRefusedRows(t *testing.T) {
	const mine = "coal-mines/explosion"
	text := "series,at,events,reported\n"
	for _, row := range []string{"1851-03-15 1 1851", "1861-03-15 1 1861", "1851-08-15 1 1881", "1891-03-15 x 1891", "1891-03-15 1 1891", "1852-08-15 1 1892"} {
		f := strings.Fields(row)
		text += mine + "," + f[0] + "T00:00:00Z," + f[1] + "," + f[2] + "-03-15T00:00:00Z\n"
	}
	markdown := filepath.Join(t.TempDir(), "report.md")
	code, _, stderr := run(t, "report", "--config", "../../testdata/coal/coal.toml", "--zone", "UTC", "--resamples", "0",
		"--markdown", markdown, writeHistory(t, "mines.csv", text))
	if code != 1 {
		t.Errorf("exit code %d", code)
	}
	form := readText(t, markdown)
	for _, part := range []string{"mines.csv:4: beyond_horizon: ", "mines.csv:5: bad_events: ", "mines.csv:7: beyond_horizon: "} {
		if !strings.Contains(stderr, part) {
			t.Errorf("%q is not said: %s", part, stderr)
		}
		place, rest, _ := strings.Cut(part, ": ")
		if part = "| " + place + " | " + strings.ReplaceAll(strings.TrimSuffix(rest, ": "), "_", `\_`) + " |"; !strings.Contains(form, part) {
			t.Errorf("the report lacks %q", part)
		}
	}
	if want := "6 rows were read, of which 1 could not be used. 2 observations were refused"; !strings.Contains(form, want) {
		t.Errorf("the report lacks %q", want)
	}
}

func TestReportErrors(t *testing.T) {
	broken := filepath.Join(t.TempDir(), "broken.json")
	if err := os.WriteFile(broken, []byte(`{"indicator":"a","setups":[{}],"found":[{"setup":7}]}`), 0o600); err != nil {
		t.Fatal(err)
	}
	for line, says := range map[string]string{
		"--rehearsal " + broken: "it is not what",
		"--resamples 5":         "--resamples is 0, or from 100",
		"--made tomorrow":       "--made",
	} {
		args := append([]string{"report", "--config", "../../testdata/coal/coal.toml", "--zone", "UTC"}, strings.Fields(line)...)
		if code, stdout, stderr := run(t, append(args, "../../testdata/coal/coal.csv")...); code == 0 || stdout != "" || !strings.Contains(stderr, says) {
			t.Errorf("%s: exit code %d, %q", line, code, stderr)
		}
	}
}
