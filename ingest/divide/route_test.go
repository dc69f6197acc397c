package divide

import (
	"fmt"
	"testing"
	"time"

	"github.com/google/go-cmp/cmp"

	"tailbell/config"
	"tailbell/ingest/bus"
	"tailbell/ingest/wire"
)

// sites are names of leading parts, by their partition of three.
func sites(t *testing.T) [3]string {
	t.Helper()
	var found [3]string
	for c := 'z'; c >= 'a'; c-- {
		name := "quillmere-" + string(c)
		found[config.PartitionOf(name+"/x", 1, 3)] = name
	}
	return found
}

// routed decodes a message of an old partition and shows where it goes.
func routed(t *testing.T, r *router, partition int, kind, data string) []string {
	t.Helper()
	raw := bus.Raw{Position: 1, Stored: time.Unix(1, 0), Subject: fmt.Sprintf("quillmere.in.%d.%s", partition, kind), Data: []byte(data)}
	p := &piece{lane: &lane{number: partition}, raw: &raw, message: wire.NewDecoder(wire.Limits{}).Decode(wire.Raw(raw))}
	var shown []string
	for _, parcel := range r.parcels(p) {
		whole := ""
		if parcel.whole {
			whole = "whole "
		}
		shown = append(shown, fmt.Sprintf("%d %s%s %s", parcel.partition, whole, parcel.kind, parcel.data))
	}
	return shown
}

func noAlert(int, string) (string, bool) { return "", false }

func TestMessagesAreSplitOnlyWhereTheyMust(t *testing.T) {
	s := sites(t)
	one := func(site string, n int) string {
		return fmt.Sprintf(`{"series":"%s/x","at":"2026-03-02T10:00:00Z","events":%d}`, site, n)
	}
	a, b, c := one(s[0], 1), one(s[1], 2), one(s[2], 3)
	array := "[" + a + ",\n " + b + ", 7, {\"series\":\n 1}, " + one(s[0], 4) + "]"
	event := `{"specversion":"1.0","id":"1","source":"/lab","type":"count","data":[` + a + "," + c + "]}"
	for _, x := range []struct {
		name, data string
		want       []string
	}{
		{"one", a, []string{"0 whole obs " + a}},
		{"of one partition", a + "\n" + one(s[0], 5), []string{"0 whole obs " + a + "\n" + one(s[0], 5)}},
		{"a bad one goes with the others", b + "\nnonsense", []string{"1 whole obs " + b + "\nnonsense"}},
		{"nothing but bad ones", "nonsense", []string{"0 whole obs nonsense"}},
		{"an array", array, []string{"0 obs " + a + "\n" + one(s[0], 4), "1 obs " + b, "0 obs 7", "0 obs [{\"series\":\n 1}]"}},
		{"an event", event, []string{"0 obs " + a, "2 obs " + c}},
		{
			"an event of one partition", `{"specversion":"1.0","id":"1","source":"/lab","type":"count","data":` + b + "}",
			[]string{"1 whole obs " + `{"specversion":"1.0","id":"1","source":"/lab","type":"count","data":` + b + "}"},
		},
	} {
		if diff := cmp.Diff(x.want, routed(t, newRouter(1, 3, 1, noAlert), 0, "obs", x.data)); diff != "" {
			t.Errorf("%s (-want +got):\n%s", x.name, diff)
		}
	}
}

// TestStraysStayRefused moves an element that came to the wrong partition to
// another wrong one.
func TestStraysStayRefused(t *testing.T) {
	s := sites(t)
	stray := fmt.Sprintf(`{"series":"%s/x","at":"2026-03-02T10:00:00Z","events":1}`, s[1])
	if diff := cmp.Diff([]string{"2 whole obs " + stray}, routed(t, newRouter(3, 3, 1, noAlert), 0, "obs", stray)); diff != "" {
		t.Error(diff)
	}
	r := newRouter(3, 1, 1, noAlert)
	if got := routed(t, r, 0, "obs", stray); len(got) > 0 || r.leftOut != 1 {
		t.Errorf("%q, %d left out", got, r.leftOut)
	}
}

func TestActsGoWhereTheirSeriesAre(t *testing.T) {
	s := sites(t)
	known := func(_ int, id string) (string, bool) { return s[2] + "/x", id == "known" }
	r := newRouter(1, 3, 1, known)
	note := `{"act":"note","alert":"%s","by":"Ann Example","why":"seen"}`
	reset := `{"act":"reset","series":"%s/*","from":"2026-03-01T00:00:00Z","by":"Ann Example","why":"mended"}`
	for _, x := range []struct {
		data string
		want []string
	}{
		{fmt.Sprintf(note, "known"), []string{"2"}},
		{fmt.Sprintf(note, "other"), []string{"0"}}, // refused there as here
		{fmt.Sprintf(reset, s[1]), []string{"1"}},
		{fmt.Sprintf(reset, "quillmere-*"), []string{"0", "1", "2"}},
		{`{"act":"forget"}`, []string{"0"}},
	} {
		var want []string
		for _, q := range x.want {
			want = append(want, q+" whole act "+x.data)
		}
		if diff := cmp.Diff(want, routed(t, r, 0, "act", x.data)); diff != "" {
			t.Errorf("%s (-want +got):\n%s", x.data, diff)
		}
	}
}

// TestCopiesGoOverOnce carries one of the copies that each old partition has,
// as often as it was said.
func TestCopiesGoOverOnce(t *testing.T) {
	reset := `{"act":"reset","series":"*/x","from":"2026-03-01T00:00:00Z","by":"Ann Example","why":"mended"}`
	r := newRouter(4, 2, 1, noAlert) // 0 and 2 feed 0, 1 and 3 feed 1
	for i, want := range []struct {
		from int
		to   []string
	}{
		{0, []string{"0"}}, {1, []string{"1"}}, {2, nil}, {2, []string{"0"}}, {3, nil}, {0, nil}, {0, []string{"0"}},
	} {
		var texts []string
		for _, q := range want.to {
			texts = append(texts, q+" whole act "+reset)
		}
		if diff := cmp.Diff(texts, routed(t, r, want.from, "act", reset)); diff != "" {
			t.Errorf("copy %d (-want +got):\n%s", i, diff)
		}
	}
}
