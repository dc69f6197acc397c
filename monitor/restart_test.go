package monitor_test

import (
	"flag"
	"fmt"
	"math/rand/v2"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"
)

var (
	restartSeed    = flag.Uint64("restart.seed", 0, "the seed of the streams that are played with restarts; 0 for a random one")
	restartStreams = flag.Int("restart.streams", 4, "how many streams are played with restarts, of each kind")
)

// TestRestarts plays random streams with acts on series, counters and changed
// set-ups: alerts, refusals, conditions and the account are the same without a
// restart as with one after every message, or every third.
func TestRestarts(t *testing.T) {
	for name, kind := range map[string]string{
		"counted":          "events = \"counted\"\nexposure = \"reported\"\n",
		"each by clock":    "events = \"each\"\nexposure = \"clock\"\nclock = { size = 1, per = \"1d\" }\n",
		"counted by clock": "events = \"counted\"\nexposure = \"clock\"\nclock = { size = 1, per = \"1d\" }\n",
	} {
		t.Run(name, func(t *testing.T) {
			seed := *restartSeed
			if seed == 0 {
				seed = rand.Uint64()
			}
			for i := range *restartStreams {
				w := &restartWriter{r: rand.New(rand.NewPCG(seed+uint64(i), 7)), kind: kind}
				messages := readScenario(t, w.stream())
				once := play(t, messages, 0)
				if !once.account.Balanced() {
					t.Errorf("seed %d: the account is not balanced: %+v", seed+uint64(i), once.account)
				}
				want := render(t, once)
				for _, every := range []int{1, 3} {
					if d := cmp.Diff(want, render(t, play(t, messages, every))); d != "" {
						t.Fatalf("-restart.seed %d -restart.streams 1: with a restart every %d messages (-without +with):\n%s", seed+uint64(i), every, d)
					}
				}
			}
		})
	}
}

// restartWriter writes a stream as the text of a scenario.
type restartWriter struct {
	r        *rand.Rand
	kind     string
	b        strings.Builder
	names    []string
	totals   map[string][2]int
	revision int
}

func (w *restartWriter) one(texts ...string) string { return texts[w.r.IntN(len(texts))] }

func rfc(at time.Time) string { return at.Format(time.RFC3339) }

func (w *restartWriter) stream() string {
	w.names = []string{"f/a/crash", "f/b/crash", "f/c/crash", "g/a/fall", "g/b/fall", "g/c/fall"}
	w.totals = map[string][2]int{}
	w.setup(true)
	day := time.Date(2026, 1, 1, 0, 0, 0, 0, time.UTC)
	for d := range 70 {
		now := day.Add(8 * time.Hour)
		for range 4 * min(1, w.r.IntN(3)) {
			now = now.Add(time.Duration(1+w.r.IntN(100)) * time.Minute)
			if s := w.one(w.names...); d/15%2 == 0 || s[2] == 'a' { // the others pause
				w.observation(s, day, now)
			}
		}
		if w.r.IntN(4) == 0 {
			w.act(day, now)
		}
		if w.r.IntN(12) == 0 {
			w.setup(false)
		}
		day = day.Add(24 * time.Hour)
	}
	return w.b.String()
}

// setup changes what is monitored and how; one indicator comes and goes.
func (w *restartWriter) setup(both bool) {
	w.b.WriteString("setup\nname = \"scenario\"\nfolder = \"x\"\n[time]\nmode = \"history\"\n")
	indicator := func(name, series, more string) {
		fmt.Fprintf(&w.b, "[[indicator]]\nname = %q\nseries = [%q]\nunit = \"days\"\nevery = \"1d\"\n%ssettle = \"1h\"\np_limit = 0.01\nquiet = 2\n%s[indicator.baseline]\nkind = \"known\"\nrate = 0.1\n",
			name, series, w.kind, more)
	}
	indicator("crash", "f/*/crash", "sums = [\"f/*/crash\"]\nhorizon = "+w.one(`"3d"`, `"6d"`)+"\nwindows = "+w.one(`["2d"]`, `["2d", "5d"]`, `["3d"]`)+"\n"+
		w.one("retire = \"5d\"\n", "retire = \"20d\"\n", "")+w.one("", "expect = \"3d\"\n"))
	if both || w.r.IntN(3) > 0 {
		indicator("fall", "g/*/fall", "horizon = \"20d\"\nwindows = [\"4d\"]\nretire = \"3d\"\n")
	}
	w.b.WriteString("end\n")
}

func (w *restartWriter) observation(series string, day, now time.Time) {
	events := max(0, w.r.IntN(8)-4) % 4
	back := time.Duration(w.r.IntN(3)) * 24 * time.Hour
	w.revision++
	id := fmt.Sprintf(`"series":%q,"id":"i%d","revision":%d,"reported":%q`, series, w.r.IntN(60), w.revision, rfc(now))
	exposure := `,"exposure":2`
	if strings.Contains(w.kind, "clock") {
		exposure = ""
	}
	switch x := w.r.IntN(10); {
	case x == 0:
		fmt.Fprintf(&w.b, `{%s,"retracted":true}`+"\n", id)
	case strings.Contains(w.kind, `"each"`):
		fmt.Fprintf(&w.b, `{%s,"at":%q,"events":%d}`+"\n", id, rfc(now.Add(-back)), events)
	case x < 4:
		start := day.Add(-back - 24*time.Hour)
		fmt.Fprintf(&w.b, `{%s,"start":%q,"end":%q,"events":%d%s}`+"\n", id, rfc(start), rfc(start.Add(24*time.Hour)), events, exposure)
	default:
		w.reading(series, now, events)
	}
}

// reading is one of a counter that begins anew now and then.
func (w *restartWriter) reading(series string, now time.Time, events int) {
	total := w.totals[series]
	total[0], total[1] = total[0]+events, total[1]+1+w.r.IntN(3)
	if w.r.IntN(12) == 0 {
		total = [2]int{w.r.IntN(2), 1}
	}
	w.totals[series] = total
	more := ""
	if !strings.Contains(w.kind, "clock") && w.r.IntN(20) > 0 {
		more = fmt.Sprintf(`,"exposure_total":%d`, total[1])
	}
	if w.r.IntN(6) == 0 {
		more += fmt.Sprintf(`,"since":%q`, rfc(now.Add(-time.Duration(w.r.IntN(60))*time.Hour)))
	}
	fmt.Fprintf(&w.b, `{"series":%q,"at":%q,"total":%d%s}`+"\n", series, rfc(now), total[0], more)
}

func (w *restartWriter) act(day, now time.Time) {
	series := w.one(w.names...)
	if w.r.IntN(5) == 0 {
		series = w.one("f/*/crash", "g/*/fall", "g/*")
	}
	from := day.Add(time.Duration(w.r.IntN(5)-3) * 24 * time.Hour)
	more := ""
	kind := w.one("reset", "out of service", "back in service", "turn", "become", "become", "sign off")
	switch kind {
	case "out of service":
		more = fmt.Sprintf(`,"until":%q`, rfc(from.Add(time.Duration(1+w.r.IntN(6))*24*time.Hour)))
	case "turn":
		kind, more = "change", fmt.Sprintf(`,"what":%q`, w.one("closing", "opening"))
	case "become":
		into := fmt.Sprintf("%s/n%d/%s", series[:1], w.r.IntN(3), map[byte]string{'f': "crash", 'g': "fall"}[series[0]])
		if w.r.IntN(3) == 0 {
			w.names = append(w.names, into)
		}
		kind, more = "change", fmt.Sprintf(`,"what":%q,"into":%q`, w.one("renamed", "merged"), into)
	case "sign off":
		more = fmt.Sprintf(`,"side":"both","until":%q`, rfc(from))
		from = from.Add(-72 * time.Hour)
	}
	fmt.Fprintf(&w.b, `{"act":%q,"series":%q,"from":%q%s,"by":"B","why":"w","at":%q}`+"\n", kind, series, rfc(from), more, rfc(now))
}
