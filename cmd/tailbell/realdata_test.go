package main

import (
	"bytes"
	"context"
	"encoding/csv"
	"encoding/json"
	"errors"
	"flag"
	"maps"
	"math"
	"os"
	"os/exec"
	"path/filepath"
	"slices"
	"strconv"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
	"github.com/rs/zerolog"

	"tailbell/alert/outlet"
	"tailbell/monitor"
	"tailbell/monitor/life"
	"tailbell/monitor/store"
)

var update = flag.Bool("update", false, "rewrite the expected texts under testdata")

// testdata is the project's folder of data.
const testdata = "../../testdata"

// realData is what the program makes of a published data set.
type realData struct {
	// printed is what replay prints for people.
	printed string
	notices []life.Notice
	account monitor.Account
}

// monitorRealData feeds the data set of that name through the embedded bus and
// replays it without one. Both must leave the same steps to the byte, and the
// store must hold the same records. The options are those of both commands.
func monitorRealData(t *testing.T, name string, options ...string) *realData {
	t.Helper()
	folder := t.TempDir()
	setup, data := filepath.Join(folder, name+".toml"), filepath.Join(folder, name+".csv")
	for _, path := range []string{setup, data} {
		text, err := os.ReadFile(filepath.Join(testdata, name, filepath.Base(path)))
		if err := errors.Join(err, os.WriteFile(path, text, 0o600)); err != nil {
			t.Fatal(err)
		}
	}
	files := append([]string{"--config", setup, "--zone", "UTC", data}, options...)
	code, printed, stderr := run(t, append([]string{"replay"}, files...)...)
	if code != 0 || stderr != "" {
		t.Fatalf("replay: exit code %d\n%s", code, stderr)
	}
	code, replayed, stderr := run(t, append([]string{"replay", "--json"}, files...)...)
	if code != 0 {
		t.Fatalf("replay --json: exit code %d\n%s", code, stderr)
	}
	if code, _, stderr := run(t, append([]string{"feed"}, files...)...); code != 0 {
		t.Fatalf("feed: exit code %d\n%s", code, stderr)
	}
	d := &realData{printed: printed, notices: parseNotices(t, replayed)}
	steps, records := d.throughBus(t, setup)
	compareNotices(t, "through the bus", strings.Split(replayed, "\n"), strings.Split(steps, "\n"))

	if diff := cmp.Diff(recordsOf(d.notices), records); diff != "" {
		t.Errorf("records (-replay +store):\n%s", diff)
	}
	return d
}

// recordsOf puts the records together from their notices, each of which has the
// evidence of its own step alone.
func recordsOf(notices []life.Notice) map[string]life.Record {
	last := map[string]life.Record{}
	for i := range notices {
		r := notices[i].Record
		r.Steps = slices.Clone(r.Steps)
		copy(r.Steps, last[r.ID].Steps)
		last[r.ID] = r
	}
	return last
}

func parseNotices(t *testing.T, text string) []life.Notice {
	t.Helper()
	var list []life.Notice
	for line := range strings.Lines(text) {
		var n life.Notice
		if err := json.Unmarshal([]byte(line), &n); err != nil {
			t.Fatal(err)
		}
		list = append(list, n)
	}
	return list
}

// throughBus lets the daemon read what was fed. It returns the steps that it
// printed, and the records in its store.
func (d *realData) throughBus(t *testing.T, path string) (steps string, records map[string]life.Record) {
	t.Helper()
	setup, err := loadSetup(path)
	if err != nil {
		t.Fatal(err)
	}
	var printed bytes.Buffer
	live, err := openDaemon(t.Context(), setup, daemonOptions{
		log: zerolog.New(t.Output()).Level(zerolog.ErrorLevel), terminal: outlet.NewTerminal(&printed, 96, true),
	})
	if err != nil {
		t.Fatal(err)
	}
	defer func() {
		if err := live.close(); err != nil {
			t.Error(err)
		}
	}()
	running, stop := context.WithCancel(t.Context())
	defer stop()
	stopped := make(chan error, 1)
	go func() { stopped <- live.run(running) }()
	p := live.parts.get(0)
	end, err := live.bus.EndOf(t.Context(), 0)
	if err == nil {
		err = p.reach(t.Context(), end)
	}
	if err == nil {
		err = p.do(t.Context(), func(e *monitor.Engine) { d.account = e.Account() })
	}
	stop()
	if err = errors.Join(err, <-stopped); err != nil {
		t.Fatal(err)
	}
	rows, err := p.store.Alerts(store.AlertFilter{}, 0, 1000)
	if err != nil {
		t.Fatal(err)
	}
	records = map[string]life.Record{}
	for i := range rows {
		records[rows[i].Record.ID] = rows[i].Record
	}
	return printed.String(), records
}

// rOutput is what an R script printed: facts ("# name: value"), and a table.
type rOutput struct {
	facts map[string]string
	rows  []map[string]string
}

// fromR returns the kept output of testdata/r/NAME.R. Where R is at hand the
// script is run, and must say the same as it did when the output was kept.
func fromR(t *testing.T, name string) *rOutput {
	t.Helper()
	script, golden := filepath.Join(testdata, "r", name+".R"), filepath.Join(testdata, "r", name+".golden")
	kept, err := os.ReadFile(golden)
	if err != nil {
		t.Fatal(err)
	}
	want := parseR(t, kept)
	t.Run("R", func(t *testing.T) {
		rscript, err := exec.LookPath("Rscript")
		if err != nil {
			if os.Getenv("TAILBELL_CI") == "1" {
				t.Fatal("TAILBELL_CI=1 asks for R, but there is no Rscript: install R 4")
			}
			t.Skip("no Rscript: the kept output of R is compared, but R is not run again")
		}
		var stderr bytes.Buffer
		c := exec.CommandContext(t.Context(), rscript, "--vanilla", script, filepath.Join(testdata, name, name+".csv"))
		c.Stderr = &stderr
		text, err := c.Output()
		if err != nil {
			t.Fatalf("%v\n%s", err, stderr.String())
		}
		if *update {
			if err := os.WriteFile(golden, text, 0o644); err != nil {
				t.Fatal(err)
			}
			return
		}
		got := parseR(t, text)
		near := cmp.Comparer(func(a, b string) bool { return a == b || closeTo(floatOf(t, a), floatOf(t, b)) })
		if diff := cmp.Diff(want, got, cmp.AllowUnexported(rOutput{}), near); diff != "" {
			t.Errorf("R says something else than %s (-kept +now):\n%s", golden, diff)
		}
	})
	return want
}

func parseR(t *testing.T, text []byte) *rOutput {
	t.Helper()
	out := &rOutput{facts: map[string]string{}}
	for line := range strings.Lines(string(text)) {
		if name, value, ok := strings.Cut(strings.TrimPrefix(line, "# "), ": "); ok && line[0] == '#' {
			out.facts[name] = strings.TrimSpace(value)
		}
	}
	table := csv.NewReader(bytes.NewReader(text))
	table.Comment = '#'
	all, err := table.ReadAll()
	if err != nil || len(all) < 2 {
		t.Fatalf("R's output can't be read: %v\n%.1000s", err, text)
	}
	for _, cells := range all[1:] {
		row := map[string]string{}
		for i, name := range all[0] {
			row[name] = cells[i]
		}
		out.rows = append(out.rows, row)
	}
	return out
}

// floatOf is NaN for what is none, which is close to nothing.
func floatOf(t *testing.T, text string) float64 {
	t.Helper()
	f, err := strconv.ParseFloat(text, 64)
	if err != nil {
		return math.NaN()
	}
	return f
}

// closeTo compares to the relative precision that R reaches.
func closeTo(a, b float64) bool {
	return math.Abs(a-b) <= 1e-9*max(math.Abs(a), math.Abs(b))
}

// sameAsR holds the numbers of a look against R's.
func sameAsR(t *testing.T, e *life.Evidence, row map[string]string) {
	t.Helper()
	if e.Ratio == nil || e.RatioUpper == nil {
		t.Fatalf("%s to %s: no ratio", e.Window, e.To)
	}
	exposure := floatOf(t, e.Exposure)
	for _, c := range []struct {
		name string
		got  float64
	}{
		{"events", float64(e.Events)},
		{"exposure", exposure},
		{"expected", e.Expected},
		{"p", e.P},
		{"p", math.Pow(10, e.Log10P)},
		{"critical", float64(e.Critical)},
		{"size", e.AttainedSize},
		{"rate", e.Rate},
		{"rate_lower", e.RateLower},
		{"rate_upper", e.RateUpper},
		{"ratio", *e.Ratio},
		{"ratio_lower", e.RatioLower},
		{"ratio_upper", *e.RatioUpper},
	} {
		if want := floatOf(t, row[c.name]); !closeTo(c.got, want) {
			t.Errorf("%s to %s: %s is %.17g; R says %.17g", e.Window, row["to"], c.name, c.got, want)
		}
	}
}

// signalling returns, by series, the ends of the slots at which an alert
// signalled. With quiet = 1 and a settle of one day these are exactly the looks
// that signal: an alert is signalling from the boundary that opened it up to the
// one, a day before it returned, at which nothing signalled; or up to the end.
func signalling(notices []life.Notice, end time.Time) map[string][]string {
	lit := map[string][]string{}
	span := func(r *life.Record, until time.Time) {
		for to := r.Opening.To; to.Before(until); to = to.AddDate(1, 0, 0) {
			lit[r.Series] = append(lit[r.Series], to.Format(time.DateOnly))
		}
	}
	still := map[string]*life.Record{}
	for i := range notices {
		n := &notices[i]
		if still[n.Record.ID] = &n.Record; n.Step.Kind == life.StepReturned {
			span(&n.Record, n.Step.At.AddDate(0, 0, -1))
			delete(still, n.Record.ID)
		}
	}
	for _, r := range still {
		span(r, end.AddDate(0, 0, 1))
	}
	for _, ends := range lit {
		slices.Sort(ends)
	}
	return lit
}

// TestCoal holds the monitor against R over the coal-mining explosions of
// 1851-1962: see testdata/coal/README.md.
func TestCoal(t *testing.T) {
	d := monitorRealData(t, "coal")
	if a := &d.account; a.Elements != 191 || a.Counted != 191 || a.Refused != 0 || a.Late != 0 || a.WithheldLooks != 0 {
		t.Errorf("191 explosions came to %+v", *a)
	}
	r := fromR(t, "coal")
	if d.account.Looks != int64(len(r.rows)) {
		t.Errorf("%d looks; R makes %d", d.account.Looks, len(r.rows))
	}
	byLook := map[string]map[string]string{}
	lit := map[string]map[string]bool{"": {}, "5y": {}, "10y": {}} // by window; "" is any
	for _, row := range r.rows {
		byLook[row["window"]+" "+row["to"]] = row
		if row["signals"] == "1" {
			lit[row["window"]][row["to"]], lit[""][row["to"]] = true, true
		}
	}
	looked := map[string]bool{}
	look := func(e *life.Evidence) string { return e.Window + " " + e.To.Format(time.DateOnly) }
	for i := range d.notices {
		n := &d.notices[i]
		for _, e := range []*life.Evidence{&n.Record.Opening, &n.Record.Worst, n.Step.Evidence} {
			if e != nil && !looked[look(e)] {
				looked[look(e)] = true
				sameAsR(t, e, byLook[look(e)])
				if e.Limit != floatOf(t, r.facts["limit"]) {
					t.Errorf("p_limit is %g; R takes %s", e.Limit, r.facts["limit"])
				}
			}
		}
	}
	first := &d.notices[0]
	if got := look(&first.Record.Opening); first.Step.Kind != life.StepOpened || got != r.facts["first"] {
		t.Errorf("the first step is %s by %s; R's first signal is %s", first.Step.Kind, got, r.facts["first"])
	}
	compareSignalling(t, lit[""], d.notices)
	t.Logf("%d looks compared, %d years' ends signal", len(looked), len(lit[""]))
	for _, window := range []string{"5y", "10y"} {
		compareSignalling(t, lit[window], replayOneWindow(t, window))
	}

	alert, _, _ := strings.Cut(d.printed, "\n\n")
	asPrinted(t, filepath.Join(testdata, "coal", "alert.txt"), alert+"\n")
}

// compareSignalling holds the years' ends at which an alert over the
// explosions signalled against R's.
func compareSignalling(t *testing.T, want map[string]bool, notices []life.Notice) {
	t.Helper()
	end := time.Date(1962, 1, 1, 0, 0, 0, 0, time.UTC)
	got := signalling(notices, end)["coal-mines/explosion"]
	if diff := cmp.Diff(slices.Sorted(maps.Keys(want)), got); diff != "" {
		t.Errorf("years' ends that signal (-R +monitor):\n%s", diff)
	}
}

// replayOneWindow replays the explosions with one of the two windows alone, so
// that the other one can't hide at which years' ends it signals.
func replayOneWindow(t *testing.T, window string) []life.Notice {
	t.Helper()
	text, err := os.ReadFile(filepath.Join(testdata, "coal", "coal.toml"))
	if err != nil {
		t.Fatal(err)
	}
	one := strings.Replace(string(text), `windows = ["5y", "10y"]`, `windows = ["`+window+`"]`, 1)
	if one == string(text) {
		t.Fatal("the set-up has other windows")
	}
	code, replayed, stderr := run(t, "replay", "--json", "--config", writeSetup(t, one), "--zone", "UTC",
		filepath.Join(testdata, "coal", "coal.csv"))
	if code != 0 {
		t.Fatalf("exit code %d\n%s", code, stderr)
	}
	return parseNotices(t, replayed)
}

// asPrinted holds the text against the file.
func asPrinted(t *testing.T, path, text string) {
	t.Helper()
	if *update {
		if err := os.WriteFile(path, []byte(text), 0o644); err != nil {
			t.Fatal(err)
		}
	}
	want, err := os.ReadFile(path)
	if err != nil {
		t.Fatal(err)
	}
	if diff := cmp.Diff(string(want), text); diff != "" {
		t.Errorf("%s (-want +got; -update rewrites it):\n%s", path, diff)
	}
}

// TestHorsekicks holds the monitor against R over the deaths by horse kick of
// 1875-1894: see testdata/horsekicks/README.md.
func TestHorsekicks(t *testing.T) {
	d := monitorRealData(t, "horsekicks", "--until", "1895-01-02")
	if a := &d.account; a.Elements != 280 || a.Counted != 280 || a.Refused != 0 || a.Looks != 280 || a.WithheldLooks != 0 {
		t.Errorf("280 corps-years came to %+v", *a)
	}
	r := fromR(t, "horsekicks")
	want := map[string][]string{}
	rows := map[string]map[string]string{}
	for _, row := range r.rows {
		year, err := strconv.Atoi(row["year"])
		if err != nil {
			t.Fatal(err)
		}
		to := strconv.Itoa(year+1) + "-01-01"
		rows[row["series"]+" "+to] = row
		if row["signals"] == "1" {
			want[row["series"]] = append(want[row["series"]], to)
		}
	}
	end := time.Date(1895, 1, 1, 0, 0, 0, 0, time.UTC)
	if diff := cmp.Diff(want, signalling(d.notices, end)); diff != "" {
		t.Errorf("corps-years that signal (-R +monitor):\n%s", diff)
	}
	for i := range d.notices {
		e := &d.notices[i].Record.Opening
		row := rows[d.notices[i].Record.Series+" "+e.To.Format(time.DateOnly)]
		if floatOf(t, row["events"]) != float64(e.Events) || !closeTo(e.P, floatOf(t, row["p"])) {
			t.Errorf("%s: %d deaths, p = %.17g; R says %s, %s", d.notices[i].Record.Series, e.Events, e.P, row["events"], row["p"])
		}
		if float64(e.Critical) != floatOf(t, r.facts["critical"]) || !closeTo(e.AttainedSize, floatOf(t, r.facts["size"])) {
			t.Errorf("critical count %d of size %.17g; R says %s, %s", e.Critical, e.AttainedSize, r.facts["critical"], r.facts["size"])
		}
		if chance := e.AttainedSize * float64(d.account.Looks); !closeTo(chance, floatOf(t, r.facts["by chance"])) {
			t.Errorf("%.17g signals by chance; R says %s", chance, r.facts["by chance"])
		}
	}
}
