package wire

import (
	"strings"
	"testing"
	"unicode/utf8"

	"tailbell/monitor"
	"tailbell/monitor/life"

	"github.com/google/go-cmp/cmp"
	"pgregory.net/rapid"
)

func TestActs(t *testing.T) {
	for _, c := range []struct{ data, want string }{
		{`{"act":"acknowledge","alert":"a-1","by":"Ann Example"}`, "act"},
		{`{"act":"close","series":"a/b","direction":"lower","by":"Ann Example","why":"duplicate reports"}`, "act"},
		{` {"act":"note","alert":"a-1","by":"x","why":"line 1\nline 2","at":"2026-03-02T00:00:00Z"} `, "act"},
		{`{"act":"shelve","alert":"a-1","by":"x","why":"y","until":"2026-03-09T00:00:00+01:00"}`, "act"},
		{`{"act":"unshelve","alert":"a-1","by":"x"}`, "act"},
		{`{"act":"shelve","alert":"a-1","by":"x","why":"y"}`, "rejected bad_act"},
		{`{"act":"shelve","alert":"a-1","by":"x","until":"2026-03-09T00:00:00Z"}`, "rejected bad_act"},
		{`{"act":"shelve","alert":"a-1","by":"x","why":"y","until":"soon"}`, "rejected bad_time"},
		{`{"act":"unshelve","alert":"a-1","by":"x","until":"2026-03-09T00:00:00Z"}`, "rejected bad_act"},
		{`{"act":"close","alert":"a-1","by":"x"}`, "rejected bad_act"},
		{`{"act":"note","alert":"a-1","by":"x","why":""}`, "rejected bad_act"},
		{`{"act":"shout","alert":"a-1","by":"x"}`, "rejected bad_act"},
		{`{"act":"acknowledge","alert":"a-1"}`, "rejected bad_act"},
		{`{"act":"acknowledge","by":"x"}`, "rejected bad_act"},
		{`{"act":"acknowledge","by":"x","series":"a/b"}`, "rejected bad_act"},
		{`{"act":"acknowledge","by":"x","series":"a/b","direction":"upper","alert":"a-1"}`, "rejected bad_act"},
		{`{"act":"acknowledge","by":"x","series":"a/b","direction":"sideways"}`, "rejected bad_act"},
		{`{"act":"acknowledge","by":"x","series":"a b","direction":"upper"}`, "rejected bad_series"},
		{`{"act":"acknowledge","alert":"a-1","by":7}`, "rejected bad_act"},
		{`{"act":"acknowledge","alert":"a-1","by":"x\u0000"}`, "rejected bad_act"},
		{`{"act":"acknowledge","alert":"a-1","by":"` + strings.Repeat("x", 201) + `"}`, "rejected bad_act"},
		{`{"act":"acknowledge","alert":"a-1","by":"x","at":"today"}`, "rejected bad_time"},
		{`{"act":"acknowledge","alert":"a-1","by":"x","by":"y"}`, "rejected duplicate_field"},
		{`{"act":"acknowledge","alert":"a-1","by":"x","patient":"y"}`, "rejected unknown_field"},
		{`{"alert":"a-1","by":"x"}`, "rejected bad_act"},
		{`[{"act":"acknowledge","alert":"a-1","by":"x"}]`, "rejected not_object"},
		{`{"act":"acknowledge"`, "rejected not_json"},
		{"", "rejected not_json"},
	} {
		m := decode(t, NewDecoder(Limits{}), "x.in.0.act", c.data)
		if got := outcome(m); got != c.want {
			t.Errorf("%s: %s, want %s", c.data, got, c.want)
		}
		if m.Kind == monitor.ActMessage && string(m.Act.Raw) != c.data {
			t.Errorf("%s: kept %q", c.data, m.Act.Raw)
		}
	}
	m := decode(t, NewDecoder(Limits{}), "x.in.0.act", event(`"data":{"act":"acknowledge","alert":"a-1","by":"x"}`), "Content-Type", structured)
	if got := outcome(m); got != "act" || m.Act.Alert != "a-1" {
		t.Errorf("in an event: %s %+v", got, m.Items)
	}
}

func textGen(most int) *rapid.Generator[string] {
	return rapid.StringOfN(rapid.RuneFrom([]rune("aé\"\\/<&>\u2028😀 \n")), 1, most, -1)
}

func TestActRoundTrip(t *testing.T) {
	d := NewDecoder(Limits{})
	rapid.Check(t, func(rt *rapid.T) {
		a := monitor.Act{
			Kind: rapid.SampledFrom([]monitor.ActKind{monitor.Acknowledge, monitor.Close, monitor.Note}).Draw(rt, "kind"),
			By:   textGen(40).Draw(rt, "by"),
			Why:  textGen(400).Draw(rt, "why"),
		}
		if rapid.Bool().Draw(rt, "by name") {
			a.Series, a.Direction = "a/b", life.Lower
		} else {
			a.Alert = textGen(10).Draw(rt, "alert")
		}
		if a.HasAt = rapid.Bool().Draw(rt, "has at"); a.HasAt {
			a.At = instantGen().Draw(rt, "at")
		}
		data := EncodeAct(nil, &a)
		a.Raw = data
		got, reason, detail := d.Act(data)
		if reason != "" {
			rt.Fatalf("%s: %s %s", data, reason, detail)
		}
		if diff := cmp.Diff(a, got); diff != "" || !IsAct(data) || !utf8.Valid(data) {
			rt.Fatalf("%s: %s", data, diff)
		}
	})
}
