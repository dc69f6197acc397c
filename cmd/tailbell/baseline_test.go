package main

import (
	"bytes"
	"encoding/json"
	"errors"
	"fmt"
	"os"
	"path/filepath"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"

	"tailbell/config"
	"tailbell/ingest/history"
	"tailbell/monitor"
	"tailbell/monitor/store"
)

// runBaseline runs "tailbell baseline".
func runBaseline(t *testing.T, args ...string) (stdout, stderr string, err error) {
	t.Helper()
	var out, complaints bytes.Buffer
	c := newBaselineCommand()
	c.SetArgs(append([]string{"--resamples", "300"}, args...))
	c.SetOut(&out)
	c.SetErr(&complaints)
	c.SilenceUsage, c.SilenceErrors = true, true
	err = c.ExecuteContext(t.Context())
	return out.String(), complaints.String(), err
}

func dataSet(name string) []string {
	return []string{
		"--config", filepath.Join(testdata, name, name+".toml"), "--zone", "UTC",
		filepath.Join(testdata, name, name+".csv"),
	}
}

// contains fails unless the text holds all that is wanted.
func contains(t *testing.T, text string, wanted ...string) {
	t.Helper()
	for _, want := range wanted {
		if !strings.Contains(text, want) {
			t.Errorf("lacks %q:\n%s", want, text)
		}
	}
}

// TestBaselineCoal: 190 of the 191 explosions lie in the years that the data
// complete, 1851 to 1961 (Jarrett 1979); they are no steady 111 years.
func TestBaselineCoal(t *testing.T) {
	out, _, err := runBaseline(t, dataSet("coal")...)
	if err != nil {
		t.Fatal(err)
	}
	contains(t, out, "1851-01-01 to before 1962-01-01, 1 series, 111 slots of 1y",
		"190 explosions in 40542 days: 1.71 per 365.25 days, 1.48 to 1.97 (95 %, exact)",
		"Spread grows from 1.6 over 1y to 7.6 over 10y",
		"events = 190\nexposure = 40542\n", "# spread = 7.58")
	out, _, err = runBaseline(t, append(dataSet("coal"), "--to", "1963-01-01")...)
	if err != nil {
		t.Fatal(err)
	}
	contains(t, out, "191 explosions in 40907 days", "112 slots")
	// Until the rate fell it was steady: 1851 to 1890 had 3.1 a year.
	out, _, err = runBaseline(t, append(dataSet("coal"), "--to", "1891-01-01")...)
	if err != nil {
		t.Fatal(err)
	}
	contains(t, out, "125 explosions in 14610 days: 3.12 per 365.25 days", "chance explains it")
}

// TestBaselineHorseKicks: 196 deaths in 280 corps-years, of which R's
// chisq.test gives a homogeneous spread of 1.09 (Bortkiewicz 1898).
func TestBaselineHorseKicks(t *testing.T) {
	out, _, err := runBaseline(t, dataSet("horsekicks")...)
	if err != nil {
		t.Fatal(err)
	}
	contains(t, out, "196 deaths in 280 corps-years: 0.7 per corps-year, 0.605 to 0.805", "Do the series differ? p = 0.0117 exact",
		"The sum of all series over 1y spreads 2.0 times", "14 series")
	// Fisher's ten corps leave out the guard and the first, sixth and eleventh.
	ten, _, err := runBaseline(t, append(dataSet("horsekicks"), "--json", "--series", "army/corps-[")...)
	if err == nil {
		t.Errorf("a pattern that matches nothing printed %s", ten)
	}
}

func TestBaselineJSON(t *testing.T) {
	out, _, err := runBaseline(t, append(dataSet("horsekicks"), "--json", "--series", "army/corps-X*/death")...)
	if err != nil {
		t.Fatal(err)
	}
	var r struct {
		Pooled struct{ Events int64 }
		Series []struct{ Series string }
		Text   string `json:"stanza_text"`
		Advice []string
	}
	if err := json.Unmarshal([]byte(out), &r); err != nil {
		t.Fatal(err)
	}
	if r.Pooled.Events != 72 || len(r.Series) != 4 || len(r.Advice) == 0 { // X 15, XI 25, XIV 24, XV 8
		t.Errorf("got %+v", r)
	}
	contains(t, r.Text, `series = "army/corps-X*/death"`)
}

func TestBaselineFigure(t *testing.T) {
	for name, magic := range map[string]string{"figure.png": "\x89PNG\r\n", "figure.SVG": "<?xml"} {
		path := filepath.Join(t.TempDir(), name)
		if _, _, err := runBaseline(t, append(dataSet("coal"), "--figure", path)...); err != nil {
			t.Fatal(err)
		}
		text, err := os.ReadFile(path)
		if err != nil || !bytes.HasPrefix(text, []byte(magic)) {
			t.Errorf("%s: %v, begins with %q", name, err, text[:min(len(text), 10)])
		}
		if name == "figure.SVG" && !bytes.Contains(text, []byte("by chance alone")) {
			t.Error("the figure lacks the model")
		}
	}
	var usage *usageError
	if _, _, err := runBaseline(t, append(dataSet("coal"), "--figure", "x.gif")...); !errors.As(err, &usage) {
		t.Errorf("a GIF: %v", err)
	}
}

// copySetup copies the set-up of a data set into a folder of the test.
func copySetup(t *testing.T, name string) string {
	t.Helper()
	text, err := os.ReadFile(filepath.Join(testdata, name, name+".toml"))
	if err != nil {
		t.Fatal(err)
	}
	path := filepath.Join(t.TempDir(), name+".toml")
	if err := os.WriteFile(path, text, 0o640); err != nil {
		t.Fatal(err)
	}
	return path
}

// TestBaselineWrite: the set-up itself takes the baseline, once for all series
// and once for some; nothing else changes.
func TestBaselineWrite(t *testing.T) {
	setup := copySetup(t, "horsekicks")
	data := filepath.Join(testdata, "horsekicks", "horsekicks.csv")
	for _, args := range [][]string{{}, {"--series", "army/corps-X*/death"}, {"--from", "1880-01-01"}} {
		_, stderr, err := runBaseline(t, append([]string{"--config", setup, "--write", setup, "--zone", "UTC", data}, args...)...)
		if err != nil {
			t.Fatal(err)
		}
		contains(t, stderr, "now has this baseline")
	}
	s, err := config.Load(setup)
	if err != nil {
		t.Fatal(err)
	}
	var got []string
	for _, b := range s.Indicators[0].Baselines {
		got = append(got, fmt.Sprintf("%s: %d in %s", b.Series, b.Events, b.Exposure))
	}
	want := []string{"army/corps-X*/death: 72 in 80", "**: 162 in 210"}
	if d := cmp.Diff(want, got); d != "" {
		t.Error(d)
	}
	text, err := os.ReadFile(setup)
	if err != nil {
		t.Fatal(err)
	}
	contains(t, string(text), "# [[indicator.baseline]]\n# kind = \"known\"\n# rate = 0.7", "# Until then:")
	if info, err := os.Stat(setup); err != nil || info.Mode().Perm() != 0o640 {
		t.Errorf("mode %v %v", info.Mode(), err)
	}
	if files, err := os.ReadDir(filepath.Dir(setup)); err != nil || len(files) != 1 {
		t.Errorf("left behind: %v %v", files, err)
	}
}

// TestBaselineWriteRefused: no other file is replaced, and a set-up that can't
// be edited stays as it is.
func TestBaselineWriteRefused(t *testing.T) {
	setup := copySetup(t, "horsekicks")
	data := filepath.Join(testdata, "horsekicks", "horsekicks.csv")
	other := filepath.Join(t.TempDir(), "other.toml")
	if err := os.WriteFile(other, []byte("mine"), 0o600); err != nil {
		t.Fatal(err)
	}
	refuse := func(target, want string) {
		t.Helper()
		before, err := os.ReadFile(target)
		if err != nil {
			t.Fatal(err)
		}
		_, _, err = runBaseline(t, "--config", setup, "--write", target, "--zone", "UTC", data)
		if err == nil || !strings.Contains(err.Error(), want) {
			t.Errorf("got %v, want %q", err, want)
		}
		if after, err := os.ReadFile(target); err != nil || !bytes.Equal(before, after) {
			t.Errorf("%s has changed: %v", target, err)
		}
	}
	refuse(other, "is not the set-up")
	text, err := os.ReadFile(setup)
	if err != nil {
		t.Fatal(err)
	}
	inline := strings.Replace(string(text), "[indicator.baseline]\nkind = \"known\"\nrate = 0.7 # 196 deaths in 280 corps-years\nsource = \"all corps and years: 196 in 280\"\n",
		"baseline = { kind = \"known\", rate = 0.7 }\n", 1)
	if err := os.WriteFile(setup, []byte(inline), 0o600); err != nil {
		t.Fatal(err)
	}
	refuse(setup, "paste the stanza by hand")
}

// TestBaselineIntoSample: every indicator of the sample can be given
// a baseline.
func TestBaselineIntoSample(t *testing.T) {
	setup, err := config.Parse(config.Sample(), "sample")
	if err != nil {
		t.Fatal(err)
	}
	for i := range setup.Indicators {
		in := &setup.Indicators[i]
		for _, pattern := range []string{"", in.Series[0].String()} {
			stanza := "[[indicator.baseline]]\n"
			if pattern != "" {
				stanza += fmt.Sprintf("series = %q\n", strings.Replace(pattern, "*", "x", 1))
			}
			stanza += "kind = \"reference\"\nevents = 7\nexposure = 700\nversion = \"new\"\n"
			text, err := insertBaseline(setup.Text, in, stanza, pattern)
			if err != nil {
				t.Errorf("%s: %v", in.Name, err)
				continue
			}
			next, err := config.Parse(text, "sample")
			if err != nil {
				t.Errorf("%s %q: %v\n%s", in.Name, pattern, err, text)
				continue
			}
			if err := checkEdit(setup.Text, next, in); err != nil {
				t.Errorf("%s: %v", in.Name, err)
			}
			b := next.Indicators[i].Baselines
			if added := b[len(b)-1]; pattern == "" && added.Version != "new" {
				t.Errorf("%s: the last baseline is %+v", in.Name, added)
			}
			if pattern != "" && (b[0].Version != "new" || len(b) != len(in.Baselines)+1) {
				t.Errorf("%s: baselines are %+v", in.Name, b)
			}
		}
	}
}

// TestBaselineFromStore: the store of a daemon gives what the files gave.
func TestBaselineFromStore(t *testing.T) {
	path := copySetup(t, "horsekicks")
	setup, err := config.Load(path)
	if err != nil {
		t.Fatal(err)
	}
	fillStore(t, setup, filepath.Join(testdata, "horsekicks", "horsekicks.csv"))
	fromStore, _, err := runBaseline(t, "--config", path, "--to", "1895-01-01")
	if err != nil {
		t.Fatal(err)
	}
	fromFile, _, err := runBaseline(t, "--config", path, "--to", "1895-01-01", "--zone", "UTC", filepath.Join(testdata, "horsekicks", "horsekicks.csv"))
	if err != nil {
		t.Fatal(err)
	}
	// The delay alone can't be had from a store; these data have none.
	if d := cmp.Diff(fromFile, fromStore); d != "" {
		t.Error(d)
	}
}

// fillStore stores what the engine makes of a file.
func fillStore(t *testing.T, setup *config.Setup, file string) {
	t.Helper()
	zone, err := config.LoadZone("UTC")
	if err != nil {
		t.Fatal(err)
	}
	h, err := history.Read(t.Context(), []string{file}, history.Options{Zone: zone})
	if err != nil {
		t.Fatal(err)
	}
	st, err := store.Create(storePath(setup, 0), identityOf(setup, 0), store.Options{})
	if err != nil {
		t.Fatal(err)
	}
	e := monitor.New(monitor.Partition{Of: 1, KeyParts: setup.KeyParts})
	e.Apply(&monitor.Message{Position: 1, Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}})
	position := uint64(1)
	for m := range h.Messages(1) {
		e.Apply(&m)
		position = m.Position
	}
	err = st.Commit(e.Drain(), store.Mark{Position: position})
	if err := errors.Join(err, st.Close()); err != nil {
		t.Fatal(err)
	}
}

func TestBaselineUsage(t *testing.T) {
	sample := filepath.Join(t.TempDir(), "sample.toml")
	if err := os.WriteFile(sample, config.Sample(), 0o600); err != nil {
		t.Fatal(err)
	}
	for _, c := range []struct {
		want string
		args []string
	}{
		{"which indicator? Say --indicator line-infection or", []string{"--config", sample}},
		{`no indicator "x"`, []string{"--config", sample, "--indicator", "x"}},
		{"--from", append(dataSet("coal"), "--from", "yesterday")},
		{"the span ends before it begins", append(dataSet("coal"), "--from", "1900-01-01", "--to", "1890-01-01")},
		{"--resamples", append(dataSet("coal"), "--resamples", "5")},
		{"There are coal-mines/explosion", append(dataSet("coal"), "--from", "2000-01-01")},
	} {
		if _, _, err := runBaseline(t, c.args...); err == nil || !strings.Contains(err.Error(), c.want) {
			t.Errorf("%v: got %v, want %q", c.args, err, c.want)
		}
	}
}

// fallsOf writes a set-up of falls a day in series, and returns its path.
func fallsOf(t *testing.T, series string) string {
	t.Helper()
	setup := filepath.Join(t.TempDir(), "falls.toml")
	text := fmt.Appendf(nil, `name = "falls"
[time]
mode = "history"
[[indicator]]
name = "fall"
series = [%q]
unit = "bed-days"
every = "1d"
windows = ["28d"]
[indicator.baseline]
kind = "known"
rate = 0.1
`, series)
	if err := os.WriteFile(setup, text, 0o600); err != nil {
		t.Fatal(err)
	}
	return setup
}

// TestBaselineOddDelays: events that were all known by the end of their day, and
// blocks longer than the history allows, are told and not stumbled over.
func TestBaselineOddDelays(t *testing.T) {
	setup := fallsOf(t, "ward/fall")
	var rows strings.Builder
	rows.WriteString("date,series,events,exposure[bed-days],reported\n")
	for day := 1; day <= 28; day++ {
		fmt.Fprintf(&rows, "2026-02-%02d,ward/fall,%d,10,2026-02-%02dT09:00:00Z\n", day, day%3, day)
	}
	file := filepath.Join(t.TempDir(), "odd.csv")
	if err := os.WriteFile(file, []byte(rows.String()), 0o600); err != nil {
		t.Fatal(err)
	}
	out, _, err := runBaseline(t, "--config", setup, "--zone", "UTC", "--to", "2026-03-01", file)
	if err != nil {
		t.Fatal(err)
	}
	contains(t, out, "given that it is at most 0s", "0s   1.0000    1.0000")
	out, _, err = runBaseline(t, "--config", setup, "--zone", "UTC", "--to", "2026-03-01", "--block", "20", file)
	if err != nil {
		t.Fatal(err)
	}
	contains(t, out, "no bootstrap: 28 periods allow blocks of 14 at most, not of 20")
}

// TestBaselineDelayOfSeries: a baseline for some series has their delay, not that
// of all: one is reported at once, the other three days after its slot.
func TestBaselineDelayOfSeries(t *testing.T) {
	setup := fallsOf(t, "*/fall")
	var rows strings.Builder
	rows.WriteString("date,series,events,exposure[bed-days],reported\n")
	for day := 1; day <= 20; day++ {
		fmt.Fprintf(&rows, "2026-03-%02d,north/fall,1,10,2026-03-%02dT09:00:00Z\n", day, day)
		fmt.Fprintf(&rows, "2026-03-%02d,south/fall,1,10,2026-03-%02dT00:00:00Z\n", day, day+4)
	}
	file := filepath.Join(t.TempDir(), "two.csv")
	if err := os.WriteFile(file, []byte(rows.String()), 0o600); err != nil {
		t.Fatal(err)
	}
	for series, want := range map[string]string{"north/*": "given that it is at most 0s", "south/*": "3d   1.0000    1.0000"} {
		out, _, err := runBaseline(t, "--config", setup, "--zone", "UTC", "--series", series, file)
		if err != nil {
			t.Fatal(err)
		}
		contains(t, out, want, "from 20 events")
	}
}
