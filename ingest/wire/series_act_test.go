package wire

import (
	"strings"
	"testing"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"

	"tailbell/monitor"
)

func TestSeriesActRoundTrip(t *testing.T) {
	d := NewDecoder(Limits{})
	rapid.Check(t, func(rt *rapid.T) {
		a := monitor.Act{
			Kind:   rapid.SampledFrom(monitor.SeriesActKinds).Draw(rt, "kind"),
			Series: rapid.SampledFrom([]string{"a/b", "a/*/falls", "**"}).Draw(rt, "series"),
			From:   min(instantGen().Draw(rt, "from"), lastInstant-1), // others end after it
			By:     textGen(40).Draw(rt, "by"), Why: textGen(100).Draw(rt, "why"),
		}
		switch a.Kind { //nolint:exhaustive // the others have no field of their own
		case monitor.Change:
			a.What = rapid.SampledFrom(monitor.ChangeKinds).Draw(rt, "what")
			if a.What == monitor.Renamed || a.What == monitor.Merged {
				a.Into = "a/c"
			}
			a.Straddle = a.What == monitor.Method && rapid.Bool().Draw(rt, "straddle")
		case monitor.SignOff:
			a.Side, a.Until = rapid.SampledFrom(monitor.Sides).Draw(rt, "side"), a.From+1
		case monitor.OutOfService:
			a.Until = a.From + 1
		}
		data := EncodeAct(nil, &a)
		a.Raw = data
		got, reason, detail := d.Act(data)
		if diff := cmp.Diff(a, got); reason != "" || diff != "" {
			rt.Fatalf("%s: %s %s\n%s", data, reason, detail, diff)
		}
	})
}

func TestSeriesActsThatMeanNothing(t *testing.T) {
	d := NewDecoder(Limits{})
	const from = `,"series":"a/b","from":"2026-03-01T00:00:00Z","by":"A"`
	for act, want := range map[string]string{
		`{"act":"reset"` + from + `}`:                                                      "why is missing",
		`{"act":"reset","series":"a/b","by":"A","why":"w"}`:                                "from is missing",
		`{"act":"reset","from":"2026-03-01T00:00:00Z","by":"A","why":"w"}`:                 "series is missing",
		`{"act":"reset","direction":"upper","why":"w"` + from + `}`:                        "on an alert",
		`{"act":"reset","until":"2026-03-02T00:00:00Z","why":"w"` + from + `}`:             "until belongs",
		`{"act":"sign off","until":"2026-03-01T00:00:00Z"` + from + `}`:                    "not after from",
		`{"act":"sign off"` + from + `}`:                                                   "until belongs",
		`{"act":"sign off","until":"2026-03-02T00:00:00Z","side":"left"` + from + `}`:      "both, events or exposure",
		`{"act":"change","why":"w"` + from + `}`:                                           "what belongs",
		`{"act":"change","what":"weather","why":"w"` + from + `}`:                          "case definition, method, opening, closing, renamed or merged",
		`{"act":"change","what":"closing","straddle":true,"why":"w"` + from + `}`:          "straddle belongs",
		`{"act":"change","what":"method","straddle":1,"why":"w"` + from + `}`:              "true or false",
		`{"act":"note","alert":"x","why":"w","by":"A","from":"2026-03-01T00:00:00Z"}`:      "belong to acts on series",
		`{"act":"reset","series":"a//b","from":"2026-03-01T00:00:00Z","by":"A","why":"w"}`: "part 2 is empty",
		`{"act":"out of service","until":"2026-03-02T00:00:00Z"` + from + `}`:              "why is missing",
		`{"act":"rest"}`: "acknowledge, close, note, mark, shelve, unshelve, reset, change, out of service, back in service or sign off",
	} {
		_, reason, detail := d.Act([]byte(act))
		if reason == "" || !strings.Contains(detail, want) {
			t.Errorf("%s: %s %q, want something with %q", act, reason, detail, want)
		}
	}
}
