package config

import (
	"bytes"
	"crypto/sha256"
	"encoding/hex"
	"errors"
	"io/fs"
	"os"
	"path/filepath"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
)

// plain is a set-up that says no more than it must. stanza and baseline lines
// are added to it.
func plain(stanza, baseline string) string {
	return `name = "quillmere"
[[indicator]]
name = "falls"
series = ["quillmere/*/fall"]
unit = "bed-days"
every = "1d"
windows = ["28d"]
` + stanza + `
[indicator.baseline]
` + baseline
}

func TestDefaults(t *testing.T) {
	const day = 24 * time.Hour
	text := plain("", "kind = \"known\"\nrate = 2\n")
	got := mustParse(t, text)
	digest := sha256.Sum256([]byte(text))
	want := &Setup{
		Name: "quillmere", Folder: "tailbell-data", Partitions: 1, KeyParts: 1,
		Bus:    Bus{MaxBytes: 4 << 30, Replicas: 1},
		Limits: Limits{MaxSeries: 20_000, MaxIDs: 1_000_000, MaxMessageBytes: 1 << 20, MaxObservations: 10_000, Memory: 4 << 30},
		Indicators: []Indicator{{
			Name: "falls", Title: "falls", EventNoun: "falls", Series: []Pattern{NewPattern("quillmere/*/fall")},
			Measure: Rate, Unit: "bed-days", Per: 1, Every: Every{1, Day}, Zone: time.UTC, ZoneName: "UTC",
			Events: Counted, Exposure: Reported, GrainDigits: 6,
			Settle: 2 * day, Horizon: 120 * day, Ahead: day, KeepIDs: true,
			Windows: []Window{{Name: "28d", Slots: 28, Step: 1}}, SlotLooks: true, Upper: true, PLimit: 0.001, Quiet: 7, Alpha: 0.05,
			Baselines: []Baseline{{Series: NewPattern("**"), Kind: Known, Rate: 2, Margin: 1, Spread: 1}}, Line: 2,
		}},
		Text: []byte(text), Digest: hex.EncodeToString(digest[:]),
	}
	opts := cmp.Options{
		cmp.Comparer(func(a, b Pattern) bool { return a == b }),
		cmp.Comparer(func(a, b *time.Location) bool { return a.String() == b.String() }),
	}
	if diff := cmp.Diff(want, got, opts); diff != "" {
		t.Errorf("defaults (-want +got):\n%s", diff)
	}
}

func TestSample(t *testing.T) {
	s := mustParse(t, string(Sample()))
	var b bytes.Buffer
	if err := s.Describe(&b); err != nil {
		t.Fatal(err)
	}
	compareGolden(t, "testdata/sample.txt", b.String())
	if d := s.Doubts("sample.toml"); len(d) > 0 {
		t.Errorf("the sample is doubtful: %v", d)
	}
	if !s.Indicators[0].Matches("quillmere-east/ward-3/line-infection") {
		t.Error("the sample does not watch the series of the documentation's examples")
	}
	if b := s.Indicators[0].BaselineFor("quillmere-west/ward-3/line-infection"); b == nil || b.Kind != Known {
		t.Errorf("baseline of the other sites: %+v", b)
	}
	if b := s.Indicators[0].BaselineFor("quillmere-east/ward-3/line-infection"); b == nil || b.Kind != Reference {
		t.Errorf("baseline of the east site: %+v", b)
	}
}

// TestSampleMarks takes the marks off the sample's commented baseline.
func TestSampleMarks(t *testing.T) {
	before, rest, found := strings.Cut(string(Sample()), "# [[indicator.baseline]]\n")
	marked, after, end := strings.Cut(rest, "\n\n")
	last := strings.LastIndex(before, "[[indicator.baseline]]")
	if !found || !end || last < 0 {
		t.Fatal("the sample has no commented baseline")
	}
	marked = "[[indicator.baseline]]\n" + strings.ReplaceAll("\n"+marked, "\n# ", "\n") + "\n"
	s := mustParse(t, before[:last]+marked+before[last:]+"\n"+after)
	if b := s.Indicators[0].BaselineFor("quillmere-north/ward-1/line-infection"); b == nil || b.Kind != Trailing || b.SpanSlots != 364 || b.Strata == nil {
		t.Errorf("%+v", b)
	}
	if d := s.Doubts("sample.toml"); len(d) > 0 {
		t.Errorf("doubtful: %v", d)
	}
}

// TestWide describes a set-up that uses what the sample doesn't.
func TestWide(t *testing.T) {
	text, err := os.ReadFile("testdata/wide.toml")
	if err != nil {
		t.Fatal(err)
	}
	s := mustParse(t, string(text))
	var b bytes.Buffer
	if err := s.Describe(&b); err != nil {
		t.Fatal(err)
	}
	for _, d := range s.Doubts("wide.toml") {
		b.WriteString("doubtful: " + d.String() + "\n")
	}
	compareGolden(t, "testdata/wide.txt", b.String())
	if !s.Indicators[5].Matches("months") || s.Indicators[5].Matches("years") {
		t.Error("patterns don't match as they should")
	}
}

type brokenWriter struct{}

func (brokenWriter) Write([]byte) (int, error) { return 0, fs.ErrClosed }

func TestDescribeFails(t *testing.T) {
	if err := mustParse(t, string(Sample())).Describe(brokenWriter{}); !errors.Is(err, fs.ErrClosed) {
		t.Errorf("got %v", err)
	}
}

// TestExactNumbers checks that decimals are rounded once, to the number
// nearest to the exact result.
func TestExactNumbers(t *testing.T) {
	known := "kind = \"known\"\nrate = 1.8\n"
	tests := []struct {
		stanza, baseline string
		alpha, rate      float64
	}{
		{"level = 0.95\nper = 1000", known, 0.05, 0.0018},
		{"level = 0.99\nper = 3", known, 0.01, 0.6},
		{"level = 0.9\nper = 0.1", known, 0.1, 18},
		{"level = 9.5e-1\nper = 1e3", known, 0.05, 0.0018},
		{"level = 0.99_9\nper = 200_000", known, 0.001, 0.000009},
		{"alpha = 0.05\nper = 365.25", "kind = \"known\"\nrate = 730.5\n", 0.05, 2},
		{"alpha = 0.1\nper = 1_000_000", "kind = \"known\"\nrate = 40\n", 0.1, 0.00004},
	}
	for _, test := range tests {
		in := mustParse(t, plain(test.stanza, test.baseline)).Indicators[0]
		if in.Alpha != test.alpha || in.Baselines[0].Rate != test.rate {
			t.Errorf("%q: alpha %v and rate %v, want %v and %v", test.stanza, in.Alpha, in.Baselines[0].Rate, test.alpha, test.rate)
		}
	}
}

func TestReference(t *testing.T) {
	b := mustParse(t, plain("", "kind = \"reference\"\nevents = 36\nexposure = \"20000.250\"\nmargin = 1.25\n")).Indicators[0].Baselines[0]
	want := Baseline{Series: NewPattern("**"), Kind: Reference, Events: 36, Exposure: Decimal{2000025, 2}, Margin: 1.25, Spread: 1}
	if b != want {
		t.Errorf("got %+v, want %+v", b, want)
	}
}

func TestSince(t *testing.T) {
	const zone = "\nzone = \"Europe/Berlin\""
	baseline := "kind = \"known\"\nrate = 2\n"
	want := time.Date(2026, 3, 30, 22, 0, 0, 0, time.UTC) // midnight in summer time
	for _, text := range []string{`2026-03-31`, `"2026-03-31"`, `2026-03-31T00:00:00+02:00`, `"2026-03-30T22:00:00Z"`} {
		if got := mustParse(t, plain("since = "+text+zone, baseline)).Indicators[0].Since; !got.Equal(want) {
			t.Errorf("since = %s: %v", text, got)
		}
	}
}

// TestTextForms checks that the form of the text does not matter.
func TestTextForms(t *testing.T) {
	text := plain("", "kind = \"known\"\nrate = 2\n")
	want := mustParse(t, text)
	forms := map[string]string{
		"byte order mark": "\ufeff" + text,
		"CRLF":            strings.ReplaceAll(text, "\n", "\r\n"),
		"array of one":    strings.Replace(text, "[indicator.baseline]", "[[indicator.baseline]]", 1),
		"single table":    strings.Replace(text, "[[indicator]]", "[indicator]", 1),
		"dotted":          strings.Replace(text, "[indicator.baseline]\nkind = \"known\"\nrate", "baseline.kind = \"known\"\nbaseline.rate", 1),
	}
	for name, form := range forms {
		got := mustParse(t, form)
		if changes := Compare(want, got); len(changes) > 0 {
			t.Errorf("%s: %v", name, changes)
		}
		if got.Digest == want.Digest {
			t.Errorf("%s: the digest is not that of the text", name)
		}
	}
}

func TestParseKeepsNoHold(t *testing.T) {
	text := []byte(plain("", "kind = \"known\"\nrate = 2\n"))
	s, err := Parse(text, "test.toml")
	if err != nil {
		t.Fatal(err)
	}
	want := bytes.Clone(text)
	clear(text)
	if !bytes.Equal(s.Text, want) || s.Indicators[0].Name != "falls" || s.Indicators[0].Series[0].String() != "quillmere/*/fall" {
		t.Error("the set-up changed with the caller's bytes")
	}
}

func TestLoad(t *testing.T) {
	folder := t.TempDir()
	file := filepath.Join(folder, "setup.toml")
	text := "[bus]\nurl = \"tls://bus.example.org\"\ncredentials = \"/etc/bus.creds\"\nca = \"ca.pem\"\n"
	text = strings.Replace(plain("", "kind = \"known\"\nrate = 2\n"), "[[indicator]]", text+"[[indicator]]", 1)
	if err := os.WriteFile(file, []byte(text), 0o600); err != nil {
		t.Fatal(err)
	}
	s, err := Load(file)
	if err != nil {
		t.Fatal(err)
	}
	if s.Folder != filepath.Join(folder, "tailbell-data") || s.Bus.CA != filepath.Join(folder, "ca.pem") || s.Bus.Credentials != "/etc/bus.creds" {
		t.Errorf("folder %s, bus %+v", s.Folder, s.Bus)
	}
	if _, err := Load(filepath.Join(folder, "absent.toml")); !errors.Is(err, fs.ErrNotExist) || !strings.Contains(err.Error(), "config sample") {
		t.Errorf("absent file: %v", err)
	}
	if err := os.WriteFile(file, []byte("name = 1"), 0o600); err != nil {
		t.Fatal(err)
	}
	var faults Faults
	if _, err := Load(file); !errors.As(err, &faults) || faults[0].File != file {
		t.Errorf("faulty file: %v", err)
	}
}

func TestTooLarge(t *testing.T) {
	if _, err := Parse(make([]byte, maxFileBytes+1), "big.toml"); err == nil {
		t.Error("accepted")
	}
}

func TestMemory(t *testing.T) {
	// 28 slots of window and 120 x 24 / 23 + 2 = 127 of horizon.
	s := mustParse(t, plain("", "kind = \"known\"\nrate = 2\n"))
	m := s.Memory()
	perSeries := int64(1152 + (28+127)*76 + 128*24)
	want := Memory{Series: []int64{perSeries}, AllSeries: 20_000 * perSeries, AllIDs: 192_000_000}
	want.Total = want.AllSeries + want.AllIDs
	if diff := cmp.Diff(want, m); diff != "" {
		t.Error(diff)
	}
	each := "looks = \"arrival\"\nevents = \"each\"\nexposure = \"clock\"\nclock = { size = 12 }"
	s = mustParse(t, plain(each, "kind = \"known\"\nrate = 2\n"))
	if m := s.Memory(); m.Series[0] != perSeries+(28+127)*40 {
		t.Errorf("looks at events: %d, without them %d", m.Series[0], perSeries)
	}
	s = mustParse(t, plain("ids = \"none\"", "kind = \"known\"\nrate = 2\n"))
	if m := s.Memory(); m.AllIDs != 0 {
		t.Errorf("ids that are not kept cost %d", m.AllIDs)
	}
}

func TestDoubts(t *testing.T) {
	s := mustParse(t, `name = "quillmere"
[bus]
url = "nats://127.0.0.1:4222, nats://bus.example.org:4222"

[[outlet]]
name = "bell"
kind = "command"
command = ["/usr/local/bin/bell"]
indicators = ["known"]
series = ["quilmere/**", "east/falls-*", "quillmere/mine"]

[[indicator]]
name = "known"
series = ["*/falls-*"]
unit = "hours"
every = "1d"
windows = ["7d", "28d", "90d"]
tails = ["lower"]
exposure = "clock"
clock = { size = 0.1, per = "1d" }
expect = "1h"
settle = "1h"
horizon = "2h"
baseline = [
  { series = "a/falls-*", kind = "known", rate = 1, spread = 4, strata = { by = "weekday", factors = [1, 1, 1, 1, 1, 2, 2] } },
  { kind = "known", rate = 1 },
]

[[indicator]]
name = "reference"
series = ["quillmere/*", "**/falls"]
unit = "mine-days"
every = "1h"
windows = ["24h"]
tails = ["upper", "lower"]
exposure = "clock"
clock = { size = 1 }
p_limit = 0.01
baseline = { kind = "reference", events = 100, exposure = 1000 }
`)
	var lines []string
	for _, d := range s.Doubts("test.toml") {
		lines = append(lines, d.String())
	}
	compareGolden(t, "testdata/doubts.txt", strings.Join(lines, "\n")+"\n")
}
