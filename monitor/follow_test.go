package monitor_test

import (
	"maps"
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"

	"tailbell/config"
	"tailbell/monitor"
	"tailbell/monitor/life"
)

// TestSumsLookByTheStanzaOfTheirTime brings another stanza while sums wait for a
// partition that is days behind, where nothing holds it back: the looks before it
// are made by the one of then, and alerts are those of sums that do not wait.
func TestSumsLookByTheStanzaOfTheirTime(t *testing.T) {
	for name, change := range map[string][]string{
		"other windows":    {`windows = ["2d"]`, `windows = ["3d", "1d"]`},
		"back to the same": {`windows = ["2d"]`, `windows = ["2d", "5d"]`},
	} {
		t.Run(name, func(t *testing.T) {
			next, err := config.Parse([]byte(strings.NewReplacer(change...).Replace(inboundSetup)), "set-up")
			if err != nil {
				t.Fatal(err)
			}
			next.Partitions = 2
			play := func(late, restarts bool) map[string]string {
				p := newPair(t)
				var waiting []*monitor.Summary
				for day := 1; day <= 20; day++ {
					if p.day(p.far, day); day != 8 && day != 9 {
						p.day(p.home, day)
					}
					if waiting = append(waiting, p.told()...); !late || day >= 16 {
						p.hand(waiting...)
						waiting = nil
					}
					switch {
					case day == 12:
						p.set(next)
					case day == 14 && name == "back to the same":
						p.set(p.setup)
					}
					if restarts {
						p.home.restart(t)
					}
				}
				p.home.restart(t)
				maps.DeleteFunc(p.home.store.Records, func(_ string, r life.Record) bool { return r.Series != "*/*/fall" })
				return texts(t, p.home.store.Records)
			}
			want := play(false, false)
			if len(want) == 0 {
				t.Fatal("no alert of the sum was compared")
			}
			for _, restarts := range []bool{false, true} {
				if diff := cmp.Diff(want, play(true, restarts)); diff != "" {
					t.Errorf("with restarts %t (-in time +late):\n%s", restarts, diff)
				}
			}
		})
	}
}
