package wire

import (
	"bytes"
	"fmt"
	"strings"
	"testing"
	"time"

	"tailbell/config"
	"tailbell/monitor"
)

var storedAt = time.Date(2026, 3, 6, 0, 0, 0, 0, time.UTC)

func decode(t *testing.T, d *Decoder, subject, data string, header ...string) monitor.Message {
	t.Helper()
	r := Raw{Position: 7, Stored: storedAt, Subject: subject, Data: []byte(data)}
	for i := 0; i < len(header); i += 2 {
		if r.Header == nil {
			r.Header = make(map[string][]string)
		}
		r.Header[header[i]] = append(r.Header[header[i]], header[i+1])
	}
	m := d.Decode(r)
	if m.Position != 7 || m.Stored != monitor.InstantOf(storedAt) {
		t.Errorf("position %d, stored %d", m.Position, m.Stored)
	}
	return m
}

// outcome is a message in short: its kind, and of each item the reason, or
// "ok" and the number of events.
func outcome(m monitor.Message) string {
	names := map[monitor.Kind]string{
		monitor.Observations: "obs", monitor.ActMessage: "act", monitor.SettingMessage: "set",
		monitor.Tick: "tick", monitor.Live: "live", monitor.Rejected: "rejected",
	}
	var b strings.Builder
	b.WriteString(names[m.Kind])
	for _, it := range m.Items {
		if it.Reason != "" {
			fmt.Fprintf(&b, " %s", it.Reason)
		} else {
			fmt.Fprintf(&b, " ok%d", it.Observation.Events)
		}
	}
	return b.String()
}

// el is a valid element with so many events.
func el(events int) string {
	return fmt.Sprintf(`{"series":"a/b","at":"2026-03-02T00:00:00Z","events":%d}`, events)
}

func TestSplit(t *testing.T) {
	pretty := strings.NewReplacer(",", ",\n  ", "{", "{\n  ", "}", "\n}").Replace(el(4))
	for _, c := range []struct{ data, want string }{
		{el(1), "obs ok1"},
		{"\n " + el(1) + "\r\n\n", "obs ok1"},
		{pretty, "obs ok4"},
		{"[" + el(1) + "," + el(2) + "]", "obs ok1 ok2"},
		{" [ " + pretty + " ,\n" + el(2) + " ] \n", "obs ok4 ok2"},
		{"[]", "obs"},
		{el(1) + "\n" + el(2) + "\n", "obs ok1 ok2"},
		{el(1) + "\r\n\r\n" + el(2), "obs ok1 ok2"},
		{el(1) + " \t\n" + pretty + "\n" + el(3), "obs ok1 ok4 ok3"},
		// a bad element refuses itself alone
		{"[" + el(1) + `,{"events":NaN},` + el(2) + "]", "obs ok1 not_json ok2"},
		{"[" + el(1) + ",7,null,[" + el(2) + "],\"x\"," + el(3) + "]", "obs ok1 not_object not_object not_object not_object ok3"},
		{"[" + el(1) + ",\"\xff,]\"," + el(2) + "]", "obs ok1 not_utf8 ok2"},
		{"[" + el(1) + ",\"\n\"," + el(2) + "]", "obs ok1 not_json ok2"},
		{"[" + el(1) + " x," + el(2) + "]", "obs not_json ok2"},
		{"[" + el(1) + "," + strings.Repeat("[", 40) + strings.Repeat("]", 40) + "," + el(2) + "]", "obs ok1 too_deep ok2"},
		{"[" + el(1) + ",," + el(2) + ",]", "obs ok1 not_json ok2 not_json"},
		{el(1) + "\n{\"series\":\"a\n" + el(2), "obs ok1 not_json ok2"},
		{el(1) + "\n{\"series\":{\n" + el(2) + "\n" + el(3), "obs ok1 not_json ok2 ok3"},
		{el(1) + "\nhello\n" + el(2), "obs ok1 not_json ok2"},
		{el(1) + el(2) + "\n" + el(3), "obs not_json ok3"},
		{el(1) + "\n[" + el(2) + "]\n" + el(3), "obs ok1 not_object ok3"},
		{el(1) + "\n}\n" + el(3), "obs ok1 not_json ok3"},
		{"hello", "obs not_json"},
		{"\xEF\xBB\xBF" + el(1), "obs not_json"},
		// what can't be split is refused as a whole
		{"", "rejected not_json"},
		{" \n", "rejected not_json"},
		{"[", "rejected not_json"},
		{"[" + el(1), "rejected not_json"},
		{"[" + el(1) + ",", "rejected not_json"},
		{"[" + el(1) + ",\"open]", "rejected not_json"},
		{"[" + el(1) + ",{]]", "rejected not_json"},
		{"[" + el(1) + "}]", "rejected not_json"},
		{"[" + el(1) + "] " + el(2), "rejected not_json"},
		{"[" + el(1) + "\n" + el(2) + "]\n[", "rejected not_json"},
	} {
		m := decode(t, NewDecoder(Limits{}), "quillmere.in.0.obs", c.data)
		if got := outcome(m); got != c.want {
			t.Errorf("%q: %s, want %s", c.data, got, c.want)
		}
		if m.Kind == monitor.Rejected && string(m.Items[0].Raw) != c.data {
			t.Errorf("%q: kept %q", c.data, m.Items[0].Raw)
		}
	}
}

func TestRefusedKeepsItsOwnBytesAndSeries(t *testing.T) {
	bad := `{"events":-1, "series":"a/b","at":"2026-03-02T00:00:00Z"}`
	data := []byte("[" + el(1) + ", " + bad + " ," + el(2) + "]")
	m := NewDecoder(Limits{}).Decode(Raw{Subject: "x.in.0.obs", Data: data})
	if got := outcome(m); got != "obs ok1 bad_events ok2" {
		t.Fatal(got)
	}
	copy(data, bytes.Repeat([]byte{'#'}, len(data)))
	it := m.Items[1]
	if string(it.Raw) != bad || it.Observation.Series != "a/b" {
		t.Errorf("raw %q, series %q", it.Raw, it.Observation.Series)
	}
	if want := "events is -1; it must be a whole number from 0 to 9007199254740992"; it.Detail != want {
		t.Errorf("detail %q, want %q", it.Detail, want)
	}
	if m.Items[0].Observation.Series != "a/b" {
		t.Error("an understood observation still refers to the message's bytes")
	}
}

// An interval must last a microsecond, the grain of time.
func TestShortestInterval(t *testing.T) {
	const format = `{"series":"a/b","start":"2026-03-02T00:00:00.000001Z","end":"2026-03-02T00:00:00.%sZ","events":1}`
	for end, want := range map[string]string{"000001": "obs bad_interval", "0000019": "obs bad_interval", "000002": "obs ok1", "0": "obs bad_interval"} {
		if got := outcome(decode(t, NewDecoder(Limits{}), "obs", fmt.Sprintf(format, end))); got != want {
			t.Errorf("%s: %s, want %s", end, got, want)
		}
	}
}

func TestLimits(t *testing.T) {
	array := "[" + el(1) + "," + el(2) + "," + el(3) + "]"
	lines := el(1) + "\n" + el(2) + "\n" + el(3)
	long := `{"series":"a/b","at":"2026-03-02T00:00:00Z",` + strings.Repeat(" ", 100) + `"events":5}`
	for _, c := range []struct {
		limits     Limits
		data, want string
	}{
		{Limits{Observations: 3}, array, "obs ok1 ok2 ok3"},
		{Limits{Observations: 2}, array, "rejected too_many"},
		{Limits{Observations: 3}, lines, "obs ok1 ok2 ok3"},
		{Limits{Observations: 2}, lines, "rejected too_many"},
		{Limits{MessageBytes: len(array)}, array, "obs ok1 ok2 ok3"},
		{Limits{MessageBytes: len(array) - 1}, array, "rejected too_large"},
		{Limits{ElementBytes: 100}, "[" + el(1) + "," + long + "," + el(2) + "]", "obs ok1 too_large ok2"},
		{Limits{ElementBytes: 100}, el(1) + "\n" + long + "\n" + el(2), "obs ok1 too_large ok2"},
		{Limits{ElementBytes: 100}, long, "obs too_large"},
		{Limits{Depth: 1}, el(1), "obs ok1"},
		{Limits{Depth: 1}, `{"x":[]}`, "obs too_deep"},
		{Limits{Depth: 2}, `{"x":[]}`, "obs unknown_field"},
	} {
		if got := outcome(decode(t, NewDecoder(c.limits), "x.in.0.obs", c.data)); got != c.want {
			t.Errorf("%+v %q: %s, want %s", c.limits, c.data, got, c.want)
		}
	}
}

func TestSubjectsAndHeaders(t *testing.T) {
	for _, c := range []struct {
		subject, data string
		header        []string
		want          string
	}{
		{"x.in.3.tick", "", nil, "tick"},
		{"x.in.3.tick", "", []string{"Tailbell-Live", "1"}, "live"},
		{"x.in.3.tick", "", []string{"tailbell-live", " 1 "}, "live"},
		{"x.in.3.tick", "", []string{"Tailbell-Live", "yes"}, "rejected bad_header"},
		{"x.in.3.tick", "{}", nil, "rejected bad_subject"},
		{"x.in.3.obs", el(1), []string{"Tailbell-Live", "1"}, "rejected bad_header"},
		{"x.in.3.obs", el(1), []string{"Tailbell-Time", "2026-03-02T00:00:00Z"}, "obs ok1"},
		{"x.in.3.obs", el(1), []string{"Tailbell-Time", "2026-03-02"}, "rejected bad_header"},
		{"x.in.3.obs", el(1), []string{"Tailbell-Time", "2026-03-02T00:00:00Z", "Tailbell-Time", "2026-03-02T00:00:00Z"}, "rejected bad_header"},
		{"x.in.3.obs", el(1), []string{"Tailbell-Time", "2026-03-02T00:00:00Z", "TAILBELL-TIME", "2026-03-02T00:00:00Z"}, "rejected bad_header"},
		{"x.in.3.obs", el(1), []string{"Nats-Msg-Id", "17"}, "obs ok1"},
		{"x.in.3.other", el(1), nil, "rejected bad_subject"},
		{"x.in.3.sum", el(1), nil, "rejected bad_summary"},
		{"x.in.3.sum", "", nil, "rejected bad_summary"},
		{"", el(1), nil, "rejected bad_subject"},
		{"obs", el(1), nil, "obs ok1"},
		{"x.in.3.set", "name = ", nil, "rejected bad_setting"},
	} {
		m := decode(t, NewDecoder(Limits{}), c.subject, c.data, c.header...)
		if got := outcome(m); got != c.want {
			t.Errorf("%s %v: %s, want %s", c.subject, c.header, got, c.want)
		}
	}
	m := decode(t, NewDecoder(Limits{}), "x.in.0.set", strings.Repeat("nonsense = 1\n", 5000))
	if n := len(m.Items[0].Detail); n > 5000 {
		t.Errorf("the faults of a set-up fill %d bytes", n)
	}
	m = decode(t, NewDecoder(Limits{}), "x.in.0.set", string(config.Sample()))
	if got := outcome(m); got != "set" || m.Setting.Setup.Name == "" {
		t.Errorf("the sample set-up: %s %+v", got, m.Items)
	}
	m = decode(t, NewDecoder(Limits{}), "x.in.0.tick", "", "Tailbell-Time", "2026-03-02T01:00:00+01:00")
	if want := monitor.InstantOf(time.Date(2026, 3, 2, 0, 0, 0, 0, time.UTC)); !m.HasTime || m.Time != want {
		t.Errorf("time %d %v, want %d", m.Time, m.HasTime, want)
	}
}

// FuzzDecode holds a whole message against its elements decoded one by one.
func FuzzDecode(f *testing.F) {
	f.Add([]byte("[" + el(1) + ",{},\"\\\"\"]"))
	f.Add([]byte(el(1) + "\n{\n}\n[1]\n" + example))
	f.Add([]byte("[[1,2],,{\"a\":\"]\"}]"))
	f.Add([]byte("{\n{\n{\n{\n{\n{\n}"))
	f.Add([]byte(`{"specversion":"1.0","id":"1","source":"/x","type":"t","data":[` + el(1) + `,7]}`))
	limits := Limits{Observations: 50, Depth: 4, ElementBytes: 300}
	f.Fuzz(func(t *testing.T, data []byte) {
		before := bytes.Clone(data)
		d := NewDecoder(limits)
		m := d.Decode(Raw{Subject: "x.in.0.obs", Data: data})
		if !bytes.Equal(before, data) {
			t.Fatal("the decoder changed its input")
		}
		switch m.Kind {
		case monitor.Rejected:
			if len(m.Items) != 1 || m.Items[0].Reason == "" || !bytes.Equal(m.Items[0].Raw, data) {
				t.Fatalf("%q: rejected as %+v", data, m.Items)
			}
			return
		case monitor.Observations:
		case monitor.ActMessage, monitor.SettingMessage, monitor.Tick, monitor.Live, monitor.SummaryMessage:
			t.Fatalf("kind %d", m.Kind)
		}
		rest := data
		for i, it := range m.Items {
			at := bytes.Index(rest, it.Raw)
			if at < 0 && !bytes.Contains(data, []byte("data_base64")) {
				t.Fatalf("%q: item %d is not in the message, in order: %q", data, i, it.Raw)
			}
			rest = rest[max(at, 0):]
			if len(it.Raw) == 0 && it.Reason == monitor.NotJSON {
				continue
			}
			if diff, alone := disagreement(d, bytes.Clone(it.Raw)); diff != "" || alone.Reason != it.Reason || alone.Observation != it.Observation {
				t.Fatalf("%q: item %d %+v, alone %+v; %s", data, i, it, alone, diff)
			}
		}
		if w := wellFormedArray(data); w != nil && len(w) <= limits.Observations {
			if len(w) != len(m.Items) {
				t.Fatalf("%q: %d items, %d elements", data, len(m.Items), len(w))
			}
			for i := range w {
				if !bytes.Equal(w[i], m.Items[i].Raw) {
					t.Fatalf("%q: element %d is %q, decoded %q", data, i, w[i], m.Items[i].Raw)
				}
			}
		}
	})
}
