package wire

import (
	"encoding/base64"
	"strings"
	"testing"
)

const structured = "application/cloudevents+json; charset=UTF-8"

// event is a CloudEvent with these further members.
func event(members ...string) string {
	required := []string{`"specversion":"1.0"`, `"id":"e-1"`, `"source":"/quillmere/lab"`, `"type":"org.example.count"`}
	return "{" + strings.Join(append(required, members...), ",") + "}"
}

func TestStructuredEvents(t *testing.T) {
	b64 := base64.StdEncoding.EncodeToString
	for _, c := range []struct{ data, want string }{
		{event(`"data":` + el(1)), "obs ok1"},
		{event(`"data":[` + el(1) + "," + el(2) + "]"), "obs ok1 ok2"},
		{event(`"data":[` + el(1) + `,{"events":NaN},` + el(2) + "]"), "obs ok1 not_json ok2"},
		{event(`"data": [ ] `), "obs"},
		{event(`"data":` + el(1) + ` x`), "obs not_json"},
		{"\n" + event(`"data":`+el(1), `"time":"2026-03-02T00:00:00Z"`, `"datacontenttype":"application/json"`, `"subject":"s"`,
			`"dataschema":"urn:x"`, `"traceparent":"00-1"`, `"sequence":7`, `"final":true`, `"gone":null`) + "\n", "obs ok1"},
		{event(`"data_base64":"` + b64([]byte(el(1)+"\n"+el(2))) + `"`), "obs ok1 ok2"},
		{event(`"data_base64":"` + b64([]byte("["+el(1)+"]")) + `"`), "obs ok1"},
		{event(`"data":"` + "text" + `"`), "obs not_object"},
		{event(`"data":null`), "obs not_object"},
		{event(), "rejected bad_envelope"},
		{event(`"data":` + el(1) + `,"data_base64":"e30="`), "rejected bad_envelope"},
		{event(`"data":` + el(1) + `,"data":` + el(1)), "rejected bad_envelope"},
		{event(`"id":"again"`, `"data":`+el(1)), "rejected bad_envelope"},
		{event(`"data_base64":"e30"`), "rejected bad_envelope"},
		{event(`"data_base64":7`), "rejected bad_envelope"},
		{event(`"data":`+el(1), `"time":"2026-03-02"`), "rejected bad_envelope"},
		{event(`"data":`+el(1), `"datacontenttype":"text/csv"`), "rejected bad_envelope"},
		{event(`"data":`+el(1), `"subject":""`), "rejected bad_envelope"},
		{event(`"data":`+el(1), `"Extension":"x"`), "rejected bad_envelope"},
		{event(`"data":`+el(1), `"extension":{"a":1}`), "rejected bad_envelope"},
		{event(`"data":`+el(1), `"extension":tru`), "rejected not_json"},
		{event(`"data":`+el(1), "\"extension\":\"\xff\""), "rejected not_utf8"},
		{strings.Replace(event(`"data":`+el(1)), `"1.0"`, `"0.3"`, 1), "rejected bad_envelope"},
		{strings.Replace(event(`"data":`+el(1)), `"1.0"`, `1.0`, 1), "rejected bad_envelope"},
		{strings.Replace(event(`"data":`+el(1)), `"e-1"`, `""`, 1), "rejected bad_envelope"},
		{strings.Replace(event(`"data":`+el(1)), `"e-1"`, `null`, 1), "rejected bad_envelope"},
		{strings.Replace(event(`"data":`+el(1)), `/quillmere/lab`, `not a reference`, 1), "rejected bad_envelope"},
		{strings.Replace(event(`"data":`+el(1)), `"type"`, `"typ"`, 1), "rejected bad_envelope"},
		{el(1), "rejected bad_envelope"},
		{"[" + event(`"data":`+el(1)) + "]", "rejected bad_envelope"},
		{event(`"data":`+el(1)) + "x", "rejected not_json"},
		{event(`"data":[` + el(1)), "rejected not_json"},
		{`{"specversion"}`, "rejected not_json"},
		{`{"a":1,}`, "rejected not_json"},
		{"{}", "rejected bad_envelope"},
		{"", "rejected bad_envelope"},
	} {
		if got := outcome(decode(t, NewDecoder(Limits{}), "x.in.0.obs", c.data, "Content-Type", structured)); got != c.want {
			t.Errorf("%q: %s, want %s", c.data, got, c.want)
		}
		// An event that nobody announced is told by its specversion.
		if !strings.HasPrefix(c.want, "obs") {
			continue
		}
		if got := outcome(decode(t, NewDecoder(Limits{ElementBytes: 120}), "x.in.0.obs", c.data)); got != c.want {
			t.Errorf("without a header: %q: %s, want %s", c.data, got, c.want)
		}
	}
	for _, other := range []string{"application/cloudevents+avro", "application/cloudevents-batch+json", "application/cloudevents"} {
		if got := outcome(decode(t, NewDecoder(Limits{}), "x.in.0.obs", event(`"data":`+el(1)), "content-type", other)); got != "rejected bad_envelope" {
			t.Errorf("%s: %s", other, got)
		}
	}
}

func TestBinaryEvents(t *testing.T) {
	required := []string{"ce-specversion", "1.0", "ce-id", "e-1", "ce-source", "/quillmere/lab", "ce-type", "org.example.count"}
	with := func(more ...string) []string { return append(append([]string{}, required...), more...) }
	for _, c := range []struct {
		header []string
		data   string
		want   string
	}{
		{with(), el(1), "obs ok1"},
		{with("Content-Type", "application/json"), "[" + el(1) + "," + el(2) + "]", "obs ok1 ok2"},
		{with("content-type", "application/x-ndjson"), el(1) + "\n" + el(2), "obs ok1 ok2"},
		{with("CE-Time", "2026-03-02T00:00:00Z", "ce-myextension", "7", "Tailbell-Time", "2026-03-02T00:00:00Z"), el(1), "obs ok1"},
		{with("Content-Type", "text/csv"), el(1), "rejected bad_envelope"},
		{with("Content-Type", "json;;"), el(1), "rejected bad_envelope"},
		{with("ce-time", "yesterday"), el(1), "rejected bad_envelope"},
		{with("ce-id", "again"), el(1), "rejected bad_envelope"},
		{with("CE-ID", "again"), el(1), "rejected bad_envelope"},
		{with("ce-my_extension", "7"), el(1), "rejected bad_envelope"},
		{with("ce-subject", "%zz"), el(1), "rejected bad_envelope"},
		{required[2:], el(1), "rejected bad_envelope"},
		{required[:6], el(1), "rejected bad_envelope"},
		{append(with()[2:], "ce-specversion", "2.0"), el(1), "rejected bad_envelope"},
		{with(), "hello", "obs not_json"},
		// An event within an event is an element with fields that are not in
		// the contract.
		{with(), event(`"data":` + el(1)), "obs unknown_field"},
	} {
		if got := outcome(decode(t, NewDecoder(Limits{}), "x.in.0.obs", c.data, c.header...)); got != c.want {
			t.Errorf("%v %q: %s, want %s", c.header, c.data, got, c.want)
		}
	}
}
