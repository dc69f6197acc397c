package main

import (
	"encoding/json"
	"flag"
	"fmt"
	"math"
	"math/rand/v2"
	"os"
	"os/exec"
	"path/filepath"
	"runtime"
	"strings"
	"testing"
	"time"

	"tailbell/config"
	"tailbell/ingest/history"
	"tailbell/monitor"
	"tailbell/monitor/replay"
)

var speed = flag.Bool("speed", false, "TestSpeed: ten years of 1,000 daily series, and say how long they took")

const speedSetup = `name = "speed"
folder = "x"
[time]
mode = "history"
[[indicator]]
name = "falls"
series = ["*/*/falls"]
unit = "bed-days"
every = "1d"
zone = "UTC"
events = "counted"
exposure = "reported"
ids = "none"
settle = "1d"
horizon = "60d"
windows = [%s]
tails = ["upper"]
p_limit = 0.00001
quiet = 3
[indicator.baseline]
kind = "known"
rate = 0.004
`

// speedHistory writes so many days of so many series, the same for a seed.
func speedHistory(t *testing.T, series, days int) (path string, until monitor.Instant) {
	t.Helper()
	path = filepath.Join(t.TempDir(), "history.csv")
	rows := fmt.Append(nil, "series,date,events,exposure\n")
	rng := rand.New(rand.NewPCG(2016, 1))
	first := time.Date(2016, 1, 1, 0, 0, 0, 0, time.UTC)
	for d := range days {
		day := first.AddDate(0, 0, d).Format(time.DateOnly)
		for i := range series {
			beds, events := 15+rng.IntN(15), 0
			for chance := math.Exp(-0.004 * float64(beds)); ; events++ { // Knuth's way to draw a Poisson count
				if chance /= rng.Float64(); chance >= 1 {
					break
				}
			}
			rows = fmt.Appendf(rows, "site-%02d/ward-%04d/falls,%s,%d,%d\n", i/50, i, day, events, beds)
		}
	}
	if err := os.WriteFile(path, rows, 0o600); err != nil {
		t.Fatal(err)
	}
	return path, monitor.InstantOf(first.AddDate(0, 0, days+1))
}

// scipyLooks is what testdata/speed/looks.py prints.
type scipyLooks struct {
	Read, P, Sum float64
	Looks        int64
	AtMost       []int64 `json:"at_most"`
}

func scipy(t *testing.T, path string, series int) scipyLooks {
	t.Helper()
	const python = "/usr/bin/python3" // Debian's, which has its packages
	if err := exec.CommandContext(t.Context(), python, "-c", "import scipy.stats").Run(); err != nil {
		if os.Getenv("TAILBELL_CI") != "" {
			t.Fatalf("python3-scipy is missing: %v", err)
		}
		t.Skip("python3-scipy is missing")
	}
	c := exec.CommandContext(t.Context(), python, filepath.Join(testdata, "speed", "looks.py"), path, fmt.Sprint(series), "0.004", "7", "28", "91")
	c.Env = append(os.Environ(), "OMP_NUM_THREADS=1", "OPENBLAS_NUM_THREADS=1")
	c.Stderr = os.Stderr
	out, err := c.Output()
	if err != nil {
		t.Fatal(err)
	}
	var s scipyLooks
	if err := json.Unmarshal(out, &s); err != nil {
		t.Fatal(err)
	}
	return s
}

// speedRead reads the history, on one core.
func speedRead(t *testing.T, path string) (*replay.Tape, time.Duration) {
	t.Helper()
	runtime.GC()
	before := processorTime()
	tape := &replay.Tape{}
	if _, err := history.Read(t.Context(), []string{path}, history.Options{Zone: time.UTC, Tape: tape, KeepsIDs: func(string) bool { return false }}); err != nil {
		t.Fatal(err)
	}
	return tape, processorTime() - before
}

// speedRun plays a tape on one core.
func speedRun(t *testing.T, tape *replay.Tape, until monitor.Instant, windows string, chances bool) (*replay.Result, time.Duration) {
	t.Helper()
	setup, err := config.Parse(fmt.Appendf(nil, speedSetup, windows), "set-up")
	if err != nil {
		t.Fatal(err)
	}
	runtime.GC()
	before := processorTime()
	r, err := replay.Run(t.Context(), setup, tape, replay.Options{Workers: 1, Until: until, HasUntil: true, Chances: chances})
	if err != nil {
		t.Fatal(err)
	}
	return r, processorTime() - before
}

// TestSpeed computes the p-value of every look of a history with the engine and
// with SciPy: the same looks, sums and counts. With -speed it does so for ten
// years of 1,000 series by three windows and says how long both took.
func TestSpeed(t *testing.T) {
	series, days := 40, 500
	if *speed {
		series, days = 1000, 3653
	}
	path, until := speedHistory(t, series, days)
	theirs := scipy(t, path, series)
	defer runtime.GOMAXPROCS(runtime.GOMAXPROCS(1))
	tape, read := speedRead(t, path)
	const three = `"7d", "28d", "91d"`
	r, all := speedRun(t, tape, until, three, true)
	ours := r.Chances[0]
	if d := math.Abs(ours.Sum/theirs.Sum - 1); ours.Looks != theirs.Looks || d > 1e-9 || fmt.Sprint(ours.AtMost) != fmt.Sprint(theirs.AtMost) {
		t.Errorf("%+v; SciPy says %+v", ours, theirs)
	}
	if !*speed {
		return
	}
	// The best of several of each: the machine does other things too.
	_, decisions := speedRun(t, tape, until, three, false)
	// A look in 91 days, but every row read into its slot: what is not a
	// decision.
	_, slots := speedRun(t, tape, until, `{ span = "91d", step = "91d" }`, false)
	for range 4 {
		again := scipy(t, path, series)
		theirs.Read, theirs.P = min(theirs.Read, again.Read), min(theirs.P, again.P)
		_, x := speedRead(t, path)
		read = min(read, x)
		_, x = speedRun(t, tape, until, three, true)
		all = min(all, x)
		_, x = speedRun(t, tape, until, three, false)
		decisions = min(decisions, x)
		_, x = speedRun(t, tape, until, `{ span = "91d", step = "91d" }`, false)
		slots = min(slots, x)
	}
	looks := float64(ours.Looks)
	text := fmt.Sprintf("%d rows, %.0f looks, processor time on one core, the best of five:\n", tape.Len(), looks)
	text += fmt.Sprintf("  SciPy:    %.2f s to read rows, %.2f s for the p-values: %.2f s\n", theirs.Read, theirs.P, theirs.Read+theirs.P)
	text += fmt.Sprintf("  Tailbell: %.2f s to read rows, %.2f s for slots, looks, alerts and p-values: %.2f s\n", read.Seconds(), all.Seconds(), (read + all).Seconds())
	text += fmt.Sprintf("  as fast:  %.2f times over all, %.2f times beyond reading\n", (theirs.Read+theirs.P)/(read+all).Seconds(), theirs.P/all.Seconds())
	text += fmt.Sprintf("  decisions alone: %.1f ns a look beyond rows into slots (%.2f s); with these %.1f ns\n",
		(decisions-slots).Seconds()*1e9/looks, slots.Seconds(), decisions.Seconds()*1e9/looks)
	t.Log(strings.TrimSpace(text))
}
