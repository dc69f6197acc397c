package monitor_test

import (
	"fmt"
	"math/rand/v2"
	"strings"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"tailbell/config"
	"tailbell/monitor"
)

const sumSetup = `
name = "sums"
folder = "x"
[time]
mode = "history"
[[indicator]]
name = "fall"
series = ["*/*/fall"]
sums = ["{site}/*/fall", "**/fall"]
unit = "bed-days"
every = "1d"
settle = "1d"
horizon = "12d"
windows = ["3d", "7d"]
p_limit = 0.01
ids = "kept"
%s
[indicator.baseline]
kind = "known"
rate = 0.05
`

// TestSumsAreTheSumsOfTheirMembers plays random reports of five wards, restarted
// now and then, and sums what each slot of the members shows.
func TestSumsAreTheSumsOfTheirMembers(t *testing.T) {
	seed := rand.Uint64()
	t.Logf("seed %d", seed)
	random := rand.New(rand.NewPCG(seed, 1))
	for name, kind := range map[string]string{
		"reported": `events = "counted"`,
		"clock":    "events = \"each\"\nexposure = \"clock\"\nclock = { size = 7, per = \"1d\" }",
		"census":   "events = \"each\"\nexposure = \"census\"\nexpires = \"3d\"",
	} {
		t.Run(name, func(t *testing.T) {
			for range 20 {
				sumsOnce(t, random, fmt.Sprintf(sumSetup, kind), name)
			}
		})
	}
}

func sumsOnce(t *testing.T, random *rand.Rand, text, kind string) {
	t.Helper()
	setup, err := config.Parse([]byte(text), "set-up")
	if err != nil {
		t.Fatal(err)
	}
	wards := []string{"east/a/fall", "east/b/fall", "east/c/fall", "west/a/fall", "west/b/fall"}
	messages := []monitor.Message{{Kind: monitor.SettingMessage, Setting: monitor.Setting{Setup: setup}}}
	begin := time.Date(2026, 3, 1, 0, 0, 0, 0, time.UTC)
	for day := range 30 {
		for i, ward := range wards {
			if day < 3*i || random.IntN(8) == 0 {
				continue
			}
			back := 0
			if random.IntN(6) == 0 {
				back = random.IntN(9)
			}
			start := begin.AddDate(0, 0, day-back)
			o := monitor.Observation{
				Series: ward, Start: monitor.InstantOf(start), End: monitor.InstantOf(start.AddDate(0, 0, 1)),
				Events: int64(random.IntN(3)), HasEvents: true, HasReported: true,
				Reported: monitor.InstantOf(begin.AddDate(0, 0, day+1)),
			}
			if kind != "clock" && random.IntN(5) > 0 {
				o.Exposure, o.HasExposure = config.Decimal{Coef: uint64(1 + random.IntN(20))}, true
			}
			messages = append(messages, monitor.Message{Items: []monitor.Item{{Observation: o}}})
		}
	}
	// What wards told since the last boundary reaches the sum of all at the next.
	messages = append(messages, monitor.Message{Kind: monitor.Tick, HasTime: true, Time: monitor.InstantOf(begin.AddDate(0, 0, 33))})
	for i := range messages {
		messages[i].Position = uint64(i + 1)
	}
	whole := play(t, messages, 0)
	again := play(t, messages, 1+random.IntN(12))
	if diff := cmp.Diff(whole.store.Steps, again.store.Steps); diff != "" {
		t.Fatalf("a restart makes a difference (-undisturbed +restarted):\n%s", diff)
	}
	for _, o := range []outcome{whole, again} {
		for sum, prefix := range map[string]string{"east/*/fall": "east/", "west/*/fall": "west/", "**/fall": ""} {
			compareSum(t, o.engine, sum, prefix, wards)
		}
	}
}

func compareSum(t *testing.T, e *monitor.Engine, sum, prefix string, wards []string) {
	t.Helper()
	var want []string
	got := map[time.Time]monitor.SlotView{}
	for _, v := range e.SlotsOf(sum, 12) {
		got[v.Start] = v
	}
	var have []string
	for start, v := range got {
		var events int64
		var exposure uint64
		members, sides := 0, [2]int{}
		for _, ward := range wards {
			if !strings.HasPrefix(ward, prefix) {
				continue
			}
			for _, m := range e.SlotsOf(ward, 40) {
				if !m.Start.Equal(start) {
					continue
				}
				members++
				events += m.Events
				if m.HasEvents {
					sides[0]++
				}
				if m.HasExposure {
					sides[1]++
					n := uint64(0)
					if _, err := fmt.Sscan(m.Exposure, &n); err != nil {
						t.Fatal(err)
					}
					exposure += n
				}
			}
		}
		line := func(events int64, hasEvents bool, exposure string, hasExposure bool) string {
			if !hasExposure {
				exposure = "?"
			}
			return fmt.Sprint(start.Format(time.DateOnly), " ", events, hasEvents, " ", exposure)
		}
		want = append(want, line(events, sides[0] == members, fmt.Sprint(exposure), sides[1] == members))
		have = append(have, line(v.Events, v.HasEvents, v.Exposure, v.HasExposure))
	}
	if len(got) < 10 {
		t.Errorf("%s: only %d slots", sum, len(got))
	}
	if diff := cmp.Diff(want, have); diff != "" {
		t.Errorf("%s (-members +sum):\n%s", sum, diff)
	}
}
